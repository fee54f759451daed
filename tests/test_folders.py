"""Whole folders or none."""

from __future__ import annotations

import os

import pytest

from twicetold.errors import TwicetoldError
from twicetold.folders import new_folder, write_text


def test_a_folder_appears_whole(tmp_path):
    out = tmp_path / "RUN"
    with new_folder(out) as part:
        (part / "run.json").write_text("{}")
        assert not out.exists()
    assert [p.name for p in tmp_path.iterdir()] == ["RUN"]


def test_nothing_is_left_when_the_work_fails(tmp_path):
    with pytest.raises(KeyboardInterrupt), new_folder(tmp_path / "RUN"):
        raise KeyboardInterrupt
    assert list(tmp_path.iterdir()) == []


def test_an_earlier_run_is_replaced_only_with_force(tmp_path):
    out = tmp_path / "RUN"
    out.mkdir()
    (out / "run.json").write_text("old")
    with pytest.raises(TwicetoldError, match="--force"), new_folder(out):
        pass
    with new_folder(out, force=True) as part:
        (part / "run.json").write_text("new")
    assert (out / "run.json").read_text() == "new"
    assert [p.name for p in tmp_path.iterdir()] == ["RUN"]


def test_a_failed_replacement_keeps_the_earlier_run(tmp_path):
    out = tmp_path / "RUN"
    out.mkdir()
    (out / "run.json").write_text("old")
    with pytest.raises(RuntimeError), new_folder(out, force=True):
        raise RuntimeError
    assert (out / "run.json").read_text() == "old"


def test_a_folder_of_somebody_elses_is_never_replaced(tmp_path):
    (tmp_path / "thesis.docx").write_text("years of work")
    with pytest.raises(TwicetoldError, match="never replaced"), new_folder(tmp_path, force=True):
        pass
    assert (tmp_path / "thesis.docx").exists()


def test_two_runs_into_one_folder(tmp_path):
    out = tmp_path / "RUN"
    with (
        new_folder(out),
        pytest.raises(TwicetoldError, match="Another run"),
        new_folder(out),
    ):
        pass


def test_the_lock_of_a_killed_run_is_no_obstacle(tmp_path):
    out = tmp_path / "RUN"
    (tmp_path / ".RUN.lock").write_text("")
    (tmp_path / ".RUN.part-1-x").mkdir()
    with new_folder(out) as part:
        (part / "run.json").write_text("{}")
    assert sorted(os.listdir(tmp_path)) == ["RUN"]


def test_a_run_killed_between_the_two_renames_is_put_back(tmp_path):
    out = tmp_path / "RUN"
    (tmp_path / ".RUN.old-1").mkdir()
    (tmp_path / ".RUN.old-1" / "run.json").write_text("old")
    # It is an earlier run again: not to be replaced by one that was not told to.
    with pytest.raises(TwicetoldError, match="--force"), new_folder(out):
        pass
    assert (out / "run.json").read_text() == "old"
    with new_folder(out, force=True) as part:
        (part / "run.json").write_text("new")
    assert (out / "run.json").read_text() == "new"
    assert sorted(os.listdir(tmp_path)) == ["RUN"]


def test_text_is_written_whole_and_not_over_another(tmp_path):
    file = tmp_path / "plan.toml"
    write_text(file, "a = 1\n")
    with pytest.raises(TwicetoldError, match="--force"):
        write_text(file, "b")
    write_text(file, "b", force=True)
    assert file.read_text() == "b"
    assert len(list(tmp_path.iterdir())) == 1
    with pytest.raises(TwicetoldError, match="not a folder"):
        write_text(tmp_path / "no" / "x", "b")
