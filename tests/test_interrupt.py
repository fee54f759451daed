"""An interrupt that a callback drops is given again, and cleaning up is left alone."""

from __future__ import annotations

import ctypes
import signal
import sys
import threading
import time

import pytest

from twicetold.interrupt import AGAIN, unmissable

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="signals")


@pytest.fixture(autouse=True)
def _usual_handler():
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    yield
    signal.signal(signal.SIGINT, before)


@ctypes.CFUNCTYPE(None)
def dropped():
    """Like a compiler's callback: what is raised in here is printed and forgotten."""
    signal.raise_signal(signal.SIGINT)


def go_on(seconds):
    until = time.monotonic() + seconds
    while time.monotonic() < until:
        time.sleep(0.01)


def test_without_help_a_dropped_interrupt_is_lost(monkeypatch):
    lost = []
    monkeypatch.setattr(sys, "unraisablehook", lost.append)
    dropped()
    go_on(2 * AGAIN)
    assert isinstance(lost[0].exc_value, KeyboardInterrupt)


def test_a_dropped_interrupt_is_given_again_and_not_printed(monkeypatch):
    lost = []
    monkeypatch.setattr(sys, "unraisablehook", lost.append)
    begin = time.monotonic()

    def work():
        dropped()
        go_on(10)

    with pytest.raises(KeyboardInterrupt), unmissable():
        work()
    assert time.monotonic() - begin < 5
    assert lost == []


def test_what_a_dropped_interrupt_broke_is_no_fault_of_its_own(monkeypatch):
    monkeypatch.setattr(sys, "unraisablehook", lambda what: None)

    def work(first):
        first()
        raise RuntimeError("nothing compiled")

    with pytest.raises(KeyboardInterrupt), unmissable():
        work(dropped)
    with pytest.raises(RuntimeError), unmissable():
        work(lambda: None)


def test_cleaning_up_is_not_interrupted_again():
    done = []

    def work():
        try:
            signal.raise_signal(signal.SIGINT)
        finally:
            go_on(4 * AGAIN)
            done.append("cleaned")

    with pytest.raises(KeyboardInterrupt), unmissable():
        work()
    go_on(2 * AGAIN)
    assert done == ["cleaned"]


def test_everything_is_as_before_afterwards():
    alarm, hook = signal.getsignal(signal.SIGALRM), sys.unraisablehook
    with unmissable():
        assert signal.getsignal(signal.SIGINT) is not signal.default_int_handler
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    assert signal.getsignal(signal.SIGALRM) is alarm
    assert sys.unraisablehook is hook
    assert signal.getitimer(signal.ITIMER_REAL) == (0.0, 0.0)


def test_ignored_interrupts_stay_ignored_and_other_threads_are_left_alone():
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    with unmissable():
        assert signal.getsignal(signal.SIGINT) is signal.SIG_IGN
    signal.signal(signal.SIGINT, signal.default_int_handler)
    seen = []

    def inside():
        with unmissable():
            seen.append(signal.getsignal(signal.SIGINT))

    thread = threading.Thread(target=inside)
    thread.start()
    thread.join()
    assert seen == [signal.default_int_handler]
