"""Runs one command in a process forked from a warm server, to be killed at any moment."""

from __future__ import annotations

import os
import sys
from pathlib import Path


def command(words: list[str], log: str, env: dict[str, str]) -> None:
    """Run the console script with its output in a file; end with its exit code."""
    from twicetold import cli

    os.environ.update(env)
    handle = os.open(log, os.O_CREAT | os.O_TRUNC | os.O_WRONLY)
    os.dup2(handle, 1)
    os.dup2(handle, 2)
    sys.argv = ["twicetold", *words]
    cli.main()


def hold(out: str, ready: str, go: str) -> None:
    """Hold a folder's name until told to go on."""
    import time

    from twicetold.folders import new_folder

    with new_folder(Path(out)) as part:
        (part / "run.json").write_text("{}")
        Path(ready).touch()
        while not Path(go).exists():
            time.sleep(0.01)
