"""Writing so that nothing half-written is ever seen: whole files and whole folders, or neither."""

from __future__ import annotations

import json
import os
import shutil
import time
import uuid
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from twicetold.errors import TwicetoldError

#: A folder of ours says so with one of these; only such a folder (or an empty one) is replaced.
MARKS = ("run.json", "datapackage.json", "about.toml", "power.csv", "test.json")
#: A lock older than this (seconds), or of a process that is gone, is left over from a kill.
STALE_LOCK = 7 * 24 * 3600


def write_text(path: Path, text: str, *, force: bool = False) -> None:
    """Write a whole text file (UTF-8, line feeds), or nothing.

    Raises
    ------
    TwicetoldError
        When the file exists and ``force`` is not given, or its folder does not exist.
    """
    if path.exists() and not force:
        raise TwicetoldError(f"{path} exists. Give another name, or --force to replace it.")
    if path.is_dir():
        raise TwicetoldError(f"{path} is a folder. Give a file name.")
    if not path.parent.is_dir():
        raise TwicetoldError(f"{path.parent} is not a folder. Make it first.")
    part = path.with_name(f".{path.name}.part-{uuid.uuid4().hex[:8]}")
    try:
        with part.open("w", encoding="utf-8", newline="\n") as out:
            out.write(text)
            out.flush()
            os.fsync(out.fileno())
        part.replace(path)
    finally:
        with suppress(OSError):
            part.unlink()


def check_new_folder(out: Path, *, force: bool) -> None:
    """Refuse, before any work, a folder that :func:`new_folder` could not write.

    Raises
    ------
    TwicetoldError
        When it exists without ``force``, was not written by twicetold, or cannot be written.
    """
    if out.is_symlink() or (out.exists() and not out.is_dir()):
        raise TwicetoldError(f"{out} is not a plain folder. Give another name.")
    if out.is_dir() and any(out.iterdir()):
        if not force:
            raise TwicetoldError(f"{out} exists. Give another name, or --force to replace it.")
        if not any((out / mark).exists() for mark in MARKS):
            raise TwicetoldError(
                f"{out} holds files that twicetold did not write; it is never replaced. "
                "Give another name."
            )
    parent = out.absolute().parent
    if not parent.is_dir():
        raise TwicetoldError(f"{parent} is not a folder. Make it first.")
    if not os.access(parent, os.W_OK):
        raise TwicetoldError(f"{parent} cannot be written to. Give a folder that can.")


@contextmanager
def new_folder(out: Path, *, force: bool = False) -> Iterator[Path]:
    """Fill a folder beside ``out`` and put it in place only when all of it is there.

    Yields
    ------
    Path
        The folder to fill. It is removed if the body raises.

    Raises
    ------
    TwicetoldError
        As :func:`check_new_folder`, or when another run is writing the same folder.
    """
    check_new_folder(out, force=force)
    out = out.absolute()
    with _lock(out):
        _sweep(out)
        part = out.with_name(f".{out.name}.part-{os.getpid()}-{uuid.uuid4().hex[:8]}")
        part.mkdir()
        try:
            yield part
            _swap(part, out)
        finally:
            shutil.rmtree(part, ignore_errors=True)


def _swap(part: Path, out: Path) -> None:
    """Put ``part`` in the place of ``out``; between the two renames lies the only gap."""
    old = out.with_name(f".{out.name}.old-{uuid.uuid4().hex[:8]}")
    if out.exists():
        out.rename(old)
    try:
        part.rename(out)
    except OSError:
        if old.exists():
            old.rename(out)
        raise
    shutil.rmtree(old, ignore_errors=True)


def _sweep(out: Path) -> None:
    """Take away what a killed run left, and put back a folder caught between two renames."""
    for old in sorted(out.parent.glob(f".{out.name}.old-*")):
        if not out.exists():
            old.rename(out)
        else:
            shutil.rmtree(old, ignore_errors=True)
    for part in out.parent.glob(f".{out.name}.part-*"):
        shutil.rmtree(part, ignore_errors=True)


@contextmanager
def _lock(out: Path) -> Iterator[None]:
    path = out.with_name(f".{out.name}.lock")
    token = json.dumps({"pid": os.getpid(), "time": int(time.time())})
    for _ in range(2):
        try:
            handle = os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY)
        except FileExistsError:
            if not _stale(path):
                raise TwicetoldError(
                    f"Another run is writing {out.name} just now. Wait for it, or give another "
                    f"name (if none is running, remove {path.name})."
                ) from None
            with suppress(FileNotFoundError):
                path.unlink()
        else:
            with os.fdopen(handle, "w") as lock:
                lock.write(token)
            break
    else:
        raise TwicetoldError(f"{path.name} cannot be taken. Remove it if no run is going on.")
    try:
        yield
    finally:
        with suppress(FileNotFoundError):
            path.unlink()


def _stale(path: Path) -> bool:
    try:
        held = json.loads(path.read_text())
        pid, since = int(held["pid"]), float(held["time"])
    except (OSError, ValueError, KeyError, TypeError):
        # A lock without content: its writer was killed between making and filling it, or is
        # filling it this very moment.
        with suppress(OSError):
            return time.time() - path.stat().st_mtime > 5
        return True
    if time.time() - since > STALE_LOCK:
        return True
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return True
    except OSError:
        return False
    return False
