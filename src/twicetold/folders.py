"""Writing so that nothing half-written is ever seen: whole files and whole folders, or neither."""

from __future__ import annotations

import os
import shutil
import sys
import uuid
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

from twicetold.errors import TwicetoldError

#: A folder of ours says so with one of these; only such a folder (or an empty one) is replaced.
MARKS = ("run.json", "datapackage.json", "about.toml", "power.csv", "test.json")


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
    _check_parent(out)


def _check_parent(out: Path) -> None:
    parent = out.absolute().parent
    if not parent.is_dir():
        raise TwicetoldError(f"{parent} is not a folder. Make it first.")
    if not os.access(parent, os.W_OK):
        raise TwicetoldError(f"{parent} cannot be written to. Give a folder that can.")


@dataclass(frozen=True)
class Claim:
    """A folder's name held by this run alone, from before the work until after the writing."""

    out: Path

    @contextmanager
    def filled(self) -> Iterator[Path]:
        """Fill a folder beside the claimed one, put in its place only when all of it is there.

        Yields
        ------
        Path
            The folder to fill. It is removed if the body raises.
        """
        part = self.out.with_name(f".{self.out.name}.part-{uuid.uuid4().hex[:8]}")
        part.mkdir()
        try:
            yield part
            _swap(part, self.out)
        finally:
            shutil.rmtree(part, ignore_errors=True)


@contextmanager
def claimed(out: Path, *, force: bool = False) -> Iterator[Claim]:
    """Hold a folder's name for one run, and clear away what a killed run left of it.

    Raises
    ------
    TwicetoldError
        As :func:`check_new_folder`, or when another run holds the name.
    """
    _check_parent(out)
    place = out.absolute()
    with _lock(place):
        _sweep(place)
        check_new_folder(out, force=force)
        yield Claim(place)


@contextmanager
def new_folder(out: Path, *, force: bool = False) -> Iterator[Path]:
    """Claim a folder and fill it: all of it appears, or nothing.

    Yields
    ------
    Path
        The folder to fill. It is removed if the body raises.

    Raises
    ------
    TwicetoldError
        As :func:`claimed`.
    """
    with claimed(out, force=force) as claim, claim.filled() as part:
        yield part


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
    """Hold a lock that the system lets go of by itself when the run ends, however it ends."""
    path = out.with_name(f".{out.name}.lock")
    while True:
        handle = os.open(path, os.O_CREAT | os.O_RDWR, 0o666)
        try:
            _take(handle)
            if _still_there(handle, path):
                break
            os.close(handle)  # the run before took it away just now: take a new one
        except BlockingIOError:
            os.close(handle)
            raise TwicetoldError(
                f"Another run is writing {out.name} just now. Wait for it, or give another name."
            ) from None
        except OSError as err:
            os.close(handle)
            raise TwicetoldError(
                f"{out.parent} lets no file be locked ({err.strerror}). Give a folder elsewhere."
            ) from err
    try:
        yield
    finally:
        with suppress(OSError):
            path.unlink()
        os.close(handle)


def _still_there(handle: int, path: Path) -> bool:
    try:
        return os.path.samestat(os.fstat(handle), path.stat())
    except FileNotFoundError:
        return False


if sys.platform == "win32":

    def _take(handle: int) -> None:
        import msvcrt

        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except PermissionError as err:
            raise BlockingIOError from err

else:

    def _take(handle: int) -> None:
        import fcntl

        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
