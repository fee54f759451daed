"""An interrupt that gets through wherever it strikes."""

from __future__ import annotations

import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

#: Seconds after which an interrupt that was lost is given again.
AGAIN = 0.2


@contextmanager
def unmissable() -> Iterator[None]:
    """Give a keyboard interrupt again until it has left the block.

    Python raises an interrupt wherever the program happens to be. In a callback of a library
    written in C (the compiler of the kernels has some) it is printed and dropped, and the program
    goes on, or fails of what was left undone. So it is raised again, but never while an exception
    is being handled (cleaning up is left alone), and in place of whatever else ends the block.
    Does nothing outside the main thread, where there are no such timers, or where interrupts are
    ignored or handled by somebody else.
    """
    usual = signal.getsignal(signal.SIGINT) is signal.default_int_handler
    here = threading.current_thread() is threading.main_thread()
    if not (usual and here and hasattr(signal, "setitimer")):
        yield
        return

    struck = threading.Event()

    def interrupted(_number: int, _frame: FrameType | None) -> None:
        struck.set()
        signal.setitimer(signal.ITIMER_REAL, AGAIN, AGAIN)
        raise KeyboardInterrupt

    def again(_number: int, _frame: FrameType | None) -> None:
        if sys.exc_info()[1] is None:
            raise KeyboardInterrupt

    alarm = signal.getsignal(signal.SIGALRM)
    dropped = sys.unraisablehook

    def quietly(what: sys.UnraisableHookArgs) -> None:
        if not isinstance(what.exc_value, KeyboardInterrupt):
            dropped(what)

    try:
        signal.signal(signal.SIGALRM, again)
        signal.signal(signal.SIGINT, interrupted)
        sys.unraisablehook = quietly
        yield
    except Exception as err:
        if struck.is_set():
            raise KeyboardInterrupt from err
        raise
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGINT, signal.default_int_handler)
        signal.signal(signal.SIGALRM, alarm)
        sys.unraisablehook = dropped
