"""The wheel: built without a network, whole, and light to import where it is installed."""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

REPO = Path(__file__).resolve().parents[1]
SOURCE = REPO / "src" / "twicetold"
#: Seconds of processor time that an import may take.
IMPORT = 0.3


def run(*words, **more):
    return subprocess.run(
        [str(w) for w in words], check=False, capture_output=True, text=True, **more
    )


@pytest.fixture(scope="module")
def wheel(tmp_path_factory) -> Path:
    """Build it with the backend that pyproject names."""
    pytest.importorskip("hatchling")
    out = tmp_path_factory.mktemp("dist")
    done = run(sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", out, cwd=REPO)
    assert done.returncode == 0, done.stderr
    (built,) = out.glob("twicetold-*-py3-none-any.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel, tmp_path_factory) -> Path:
    """Install it into an empty folder, away from the sources."""
    target = tmp_path_factory.mktemp("installed")
    words = ("--no-deps", "--no-index", "--no-compile", "--disable-pip-version-check")
    done = run(sys.executable, "-m", "pip", "install", "-q", *words, "--target", target, wheel)
    assert done.returncode == 0, done.stderr
    return target


@pytest.fixture
def there(installed, tmp_path):
    """Run something with what is installed, from an empty folder."""
    clean = {k: v for k, v in os.environ.items() if not k.startswith("PYTHON")}
    place = {**clean, "PYTHONPATH": str(installed)}
    return lambda *words: run(*words, cwd=tmp_path, env=place)


def test_everything_is_in_it_and_nothing_else(wheel):
    with zipfile.ZipFile(wheel) as archive:
        names = {n for n in archive.namelist() if ".dist-info/" not in n}
    ours = {
        f"twicetold/{p.relative_to(SOURCE).as_posix()}"
        for p in SOURCE.rglob("*")
        if p.is_file() and "__pycache__" not in p.parts
    }
    assert names == ours
    assert {Path(n).suffix for n in names} >= {".py", ".j2", ".css", ".typed"}


def test_imports_quietly_and_soon(there, installed):
    code = "import twicetold; print(twicetold.__file__, twicetold.__version__)"
    seconds = []
    for _ in range(5):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        done = there(sys.executable, "-W", "error", "-c", code)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        seconds.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
        assert (done.returncode, done.stderr) == (0, "")
        assert Path(done.stdout.split()[0]).is_relative_to(installed)
    # Of processor time, the interpreter's own start included; the first one compiles.
    assert min(seconds) < IMPORT


def test_command_works_where_it_is_installed(there, installed):
    command = installed / "bin" / "twicetold"
    if not command.exists():  # Windows
        command = next(installed.rglob("twicetold.exe"))
    said = there(command, "--help")
    assert (said.returncode, said.stderr) == (0, "")
    assert "rank" in said.stdout
    assert there(command, "example", "catalogue").returncode == 0
    said = there(command, "check", "catalogue")
    assert said.returncode == 0, said.stderr
    assert said.stdout.endswith("ready\n")
