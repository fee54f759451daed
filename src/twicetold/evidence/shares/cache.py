"""Finished work kept on disk, found again by the hash of what it depends on.

An entry is a folder named by a SHA-256 with one file per finished piece. A file is the SHA-256 of
its content followed by a NumPy archive; a piece that does not match is thrown away and made again.
Pieces are written beside their place and moved there, so a killed run leaves whole pieces only, and
the next run goes on from them. The oldest entries go first when the limit is passed.

The key covers the graph, propensities, families, recording, turnover and seed of a catalogue, never
its motifs; withheld rows were dropped before any of these were made.
"""

from __future__ import annotations

import hashlib
import io
import logging
import os
import shutil
import sys
import time
import uuid
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

#: Raised whenever the meaning of what is stored changes without any compiled kernel changing.
VERSION = 1
#: Bytes the cache may take; TWICETOLD_CACHE_MB overrides.
LIMIT = 2_000_000_000
#: A half-written file older than this (seconds) was left by a killed run.
_STALE = 3600
_DIGEST = 32
_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Entry:
    """One entry of the cache.

    Parameters
    ----------
    folder : Path
    """

    folder: Path

    def read(self, name: str) -> dict[str, npt.NDArray[Any]] | None:
        """Give a piece's arrays, or None when it is not there or does not match its hash."""
        path = self.folder / f"{name}.bin"
        try:
            content = path.read_bytes()
        except OSError:
            return None
        if hashlib.sha256(content[_DIGEST:]).digest() == content[:_DIGEST]:
            with suppress(OSError, ValueError, KeyError):
                archive = np.load(io.BytesIO(content[_DIGEST:]), allow_pickle=False)
                return {key: archive[key] for key in archive.files}
        _log.warning("A damaged piece of the cache was thrown away and is made again: %s", name)
        with suppress(OSError):
            path.unlink()
        return None

    def write(self, name: str, arrays: Mapping[str, npt.NDArray[Any]]) -> None:
        """Keep a piece. A disk that cannot be written to costs time later, not the run."""
        buffer = io.BytesIO()
        np.savez(buffer, **arrays)  # type: ignore[arg-type]
        content = buffer.getvalue()
        part = self.folder / f".{name}.part-{os.getpid()}-{uuid.uuid4().hex[:8]}"
        try:
            with part.open("wb") as out:
                out.write(hashlib.sha256(content).digest())
                out.write(content)
            part.replace(self.folder / f"{name}.bin")
        except OSError as err:
            _log.warning("The cache could not be written (%s); the run goes on.", err.strerror)
            with suppress(OSError):
                part.unlink()

    def holds(self, prefix: str) -> bool:
        """Whether there is a finished piece whose name starts so (it may still be damaged)."""
        try:
            return any(p.name.startswith(prefix) for p in self.folder.glob("*.bin"))
        except OSError:
            return False

    def touch(self) -> None:
        """Mark the entry as just used."""
        with suppress(OSError):
            os.utime(self.folder)

    def finish(self) -> None:
        """Mark the entry as just used and keep the cache within its limit."""
        self.touch()
        make_room(self.folder.parent, keep=self.folder.name)


def cache_folder() -> Path:
    """Where finished work is kept: ``TWICETOLD_CACHE``, or the platform's folder for caches."""
    given = os.environ.get("TWICETOLD_CACHE")
    if given:
        return Path(given)
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA")
        return (Path(base) if base else Path.home() / "AppData" / "Local") / "twicetold" / "Cache"
    if sys.platform == "darwin":
        return Path.home() / "Library" / "Caches" / "twicetold"
    base = os.environ.get("XDG_CACHE_HOME")
    return (Path(base) if base else Path.home() / ".cache") / "twicetold"


def open_entry(depends_on: Mapping[str, object]) -> Entry | None:
    """Open (or make) the entry of what depends on just this; None when no folder can be made.

    Room is made for a new entry only: looking through a full cache takes longer than reading one.
    """
    key = key_of(depends_on)
    try:
        root = cache_folder() / "banks"
        folder = root / key
        known = folder.is_dir()
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
    except (OSError, RuntimeError) as err:  # RuntimeError: no home folder
        _log.warning("No cache can be kept (%s); the run goes on without.", err)
        return None
    entry = Entry(folder)
    entry.touch()
    if not known:
        make_room(root, keep=key)
    return entry


def key_of(depends_on: Mapping[str, object]) -> str:
    """SHA-256 of names and values; arrays enter with type, shape and bytes."""
    digest = hashlib.sha256(f"{VERSION} {kernel_version()}".encode())
    for name in sorted(depends_on):
        value = depends_on[name]
        digest.update(f"\x1f{name}\x1e".encode())
        if isinstance(value, np.ndarray):
            digest.update(f"{value.dtype.str}{value.shape}".encode())
            digest.update(np.ascontiguousarray(value).tobytes())
        else:
            digest.update(repr(value).encode())
    return digest.hexdigest()


@lru_cache(maxsize=1)
def kernel_version() -> str:
    """Hash of the modules that make what is stored, and of NumPy's and numba's versions."""
    import numba

    import twicetold
    from twicetold import spread

    here = Path(__file__).parent
    package = Path(twicetold.__file__).parent
    made_by = [
        *(here / f"{name}.py" for name in ("_kernels", "bank", "landscape")),
        *(
            here / f"{name}.py"
            for name in (
                *("_network_kernels", "features", "network", "posterior", "heldout"),
                "simplex",
            )
        ),
        *(Path(spread.__file__).parent / f"{name}.py" for name in ("_kernels", "chain", "world")),
        *(package / f"{name}.py" for name in ("_sfc64", "randomness")),
    ]
    digest = hashlib.sha256(f"{np.__version__} {numba.__version__}".encode())
    for path in made_by:
        digest.update(path.read_bytes())
    return digest.hexdigest()


def limit_bytes() -> int:
    """Bytes the cache may take."""
    with suppress(KeyError, ValueError, OverflowError):
        return max(0, int(float(os.environ["TWICETOLD_CACHE_MB"]) * 1e6))
    return LIMIT


def make_room(root: Path, *, keep: str = "") -> None:
    """Remove the entries least recently used until the rest is within the limit.

    Parameters
    ----------
    root : Path
    keep : str
        Entry that stays in any case.
    """
    entries = []
    for folder in _folders(root):
        size = 0
        for path in folder.glob("*"):
            with suppress(OSError):
                seen = path.stat()
                if path.name.startswith(".") and time.time() - seen.st_mtime > _STALE:
                    path.unlink()
                    continue
                size += seen.st_size
        with suppress(OSError):
            entries.append((folder.stat().st_mtime, folder, size))
    total = sum(size for _, _, size in entries)
    for _, folder, size in sorted(entries):
        if total <= limit_bytes():
            return
        if folder.name != keep:
            shutil.rmtree(folder, ignore_errors=True)
            total -= size


def clear_cache() -> None:
    """Remove every entry (and nothing else)."""
    for folder in _folders(cache_folder() / "banks"):
        shutil.rmtree(folder, ignore_errors=True)


def _folders(root: Path) -> list[Path]:
    """Entries only: real folders named by a SHA-256, so that nothing of others is ever removed."""
    try:
        found = sorted(root.iterdir())
    except OSError:
        return []
    hexadecimal = set("0123456789abcdef")
    return [
        p
        for p in found
        if len(p.name) == 64 and set(p.name) <= hexadecimal and p.is_dir() and not p.is_symlink()
    ]
