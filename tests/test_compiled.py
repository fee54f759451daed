"""Where kernels are kept when neither the package nor the home can be written."""

from __future__ import annotations

import os
import stat
import sys
import tempfile
from pathlib import Path

import pytest

from twicetold import _compiled

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="owners and modes of files")


@pytest.fixture
def nowhere(monkeypatch, tmp_path):
    """No folder for kernels given, none writable; a temporary folder of the test's own."""
    monkeypatch.setenv("NUMBA_CACHE_DIR", "")
    monkeypatch.setattr(_compiled, "_writable", lambda folder: False)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    # numba is loaded already in this process, and keeps what it has.
    monkeypatch.delitem(sys.modules, "numba", raising=False)
    return tmp_path


def named() -> Path:
    _compiled.keep_kernels_somewhere()
    return Path(os.environ["NUMBA_CACHE_DIR"])


def test_a_private_folder_kept_from_run_to_run(nowhere):
    folder = named()
    assert folder.parent == nowhere
    assert stat.S_IMODE(folder.stat().st_mode) == 0o700
    os.environ["NUMBA_CACHE_DIR"] = ""
    assert named() == folder


@pytest.mark.parametrize("trap", ["open to others", "link", "file"])
def test_what_somebody_else_may_have_filled_is_not_used(nowhere, trap):
    planted = nowhere / f"twicetold-kernels-{os.getuid()}"
    if trap == "open to others":
        planted.mkdir()
        planted.chmod(0o777)
    elif trap == "link":
        (nowhere / "theirs").mkdir(mode=0o700)
        planted.symlink_to(nowhere / "theirs")
    else:
        planted.write_text("")
    folder = named()
    assert folder != planted
    assert folder.parent == nowhere
    assert stat.S_IMODE(folder.stat().st_mode) == 0o700


def test_left_alone_where_kernels_have_a_place(monkeypatch, tmp_path):
    monkeypatch.setenv("NUMBA_CACHE_DIR", "mine")
    monkeypatch.setattr(_compiled, "_writable", lambda folder: False)
    _compiled.keep_kernels_somewhere()
    assert os.environ["NUMBA_CACHE_DIR"] == "mine"
    monkeypatch.undo()
    monkeypatch.setenv("NUMBA_CACHE_DIR", "")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "not" / "yet"))
    _compiled.keep_kernels_somewhere()
    assert os.environ["NUMBA_CACHE_DIR"] == ""
