"""Where compiled kernels are kept when neither the package nor the home folder can be written.

numba keeps them beside the modules, or else in the user's cache folder, and refuses to load a
kernel when neither takes files (a shared read-only installation, an account without a home).
"""

from __future__ import annotations

import os
import sys
from contextlib import suppress
from pathlib import Path

_HERE = Path(__file__).parent


def keep_kernels_somewhere() -> None:
    """Name a folder of this user's own under the system's temporary one, only where none is left.

    Must run before numba is loaded. A folder given by ``NUMBA_CACHE_DIR`` is left as it is.
    """
    if os.environ.get("NUMBA_CACHE_DIR") or _writable(_HERE / "__pycache__") or _home_writable():
        return
    folder = _private_folder()
    os.environ["NUMBA_CACHE_DIR"] = str(folder)
    if "numba" in sys.modules:
        sys.modules["numba"].config.CACHE_DIR = str(folder)


def _home_writable() -> bool:
    given = os.environ.get("XDG_CACHE_HOME")
    try:
        return _writable((Path(given) if given else Path.home() / ".cache") / "numba")
    except RuntimeError:  # no home folder is known
        return False


def _writable(folder: Path) -> bool:
    """Whether files can be made in a folder, or in the nearest above it that exists."""
    while not folder.exists() and folder != folder.parent:
        folder = folder.parent
    return os.access(folder, os.W_OK | os.X_OK)


def _private_folder() -> Path:
    """A folder that nobody else can have put anything into: what numba loads from it is run."""
    import atexit
    import shutil
    import stat
    import tempfile

    if hasattr(os, "getuid"):
        folder = Path(tempfile.gettempdir()) / f"twicetold-kernels-{os.getuid()}"
        with suppress(OSError):
            folder.mkdir(mode=0o700, exist_ok=True)
            seen = folder.lstat()
            ours = stat.S_ISDIR(seen.st_mode) and seen.st_uid == os.getuid()
            if ours and not seen.st_mode & 0o077:
                return folder
    folder = Path(tempfile.mkdtemp(prefix="twicetold-kernels-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder
