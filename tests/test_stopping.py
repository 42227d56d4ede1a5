"""Signals: heard at once, by a thread, whatever the main thread is doing."""

from __future__ import annotations

import os
import signal
import threading

import pytest

from streambasis.watch.stopping import Signals

HEARD_WITHIN = 5.0
"""Seconds; far more than a thread needs on a busy machine."""


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_first_signal_asks_and_the_second_acts(number: signal.Signals) -> None:
    """One signal sets the event; afterwards, and at the end, the former handler is back."""
    acted: list[int] = []

    def outer(got: int, frame: object) -> None:
        del frame
        acted.append(got)

    before = signal.signal(number, outer)
    told: list[bool] = []
    try:
        with Signals() as signals:
            signals.on_stop = lambda: told.append(True)
            assert not signals.asked.is_set()
            os.kill(os.getpid(), number)
            assert signals.asked.wait(HEARD_WITHIN)
            assert acted == []
            os.kill(os.getpid(), number)
            assert acted == [number]
        assert told == [True]
        assert signal.getsignal(number) is outer
    finally:
        signal.signal(number, before)


def test_a_wish_to_stop_is_heard_while_its_own_lock_is_held() -> None:
    """The signal that comes while the main thread holds the event's lock does not wait for it."""
    with Signals() as signals:
        with signals.asked._cond:  # what wait() holds for a moment at each call
            os.kill(os.getpid(), signal.SIGTERM)
        assert signals.asked.wait(HEARD_WITHIN)


def test_each_hang_up_is_told_and_stops_nothing() -> None:
    """SIGHUP calls back each time it comes, and is no wish to stop."""
    told = threading.Semaphore(0)
    with Signals() as signals:
        signals.on_hang_up = told.release
        for _ in range(3):
            os.kill(os.getpid(), signal.SIGHUP)
            assert told.acquire(timeout=HEARD_WITHIN)
        assert not signals.asked.is_set()


def test_a_terminal_that_is_closed_is_a_wish_to_stop() -> None:
    """A run on it keeps what it has and ends."""
    before = signal.signal(signal.SIGHUP, signal.SIG_DFL)
    try:
        with Signals(hang_up_stops=True) as signals:
            os.kill(os.getpid(), signal.SIGHUP)
            assert signals.asked.wait(HEARD_WITHIN)
    finally:
        signal.signal(signal.SIGHUP, before)


def test_a_hang_up_that_nobody_waits_for_is_passed_over() -> None:
    """Before the daemon has set itself up there is nothing to read again."""
    with Signals() as signals:
        os.kill(os.getpid(), signal.SIGHUP)
        os.kill(os.getpid(), signal.SIGTERM)
        assert signals.asked.wait(HEARD_WITHIN)


def test_a_hang_up_that_is_ignored_stays_ignored() -> None:
    """A run that was started to outlive its terminal does."""
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with Signals(hang_up_stops=True) as signals:
            os.kill(os.getpid(), signal.SIGHUP)
            os.kill(os.getpid(), signal.SIGTERM)
            assert signals.asked.wait(HEARD_WITHIN)
            assert signal.getsignal(signal.SIGHUP) == signal.SIG_IGN
    finally:
        signal.signal(signal.SIGHUP, before)


def test_nothing_is_left_behind() -> None:
    """No thread, no descriptor and no handler outlives the block."""

    def threads_and_files() -> tuple[int, int]:
        return threading.active_count(), len(os.listdir("/proc/self/fd"))

    before = threads_and_files(), signal.getsignal(signal.SIGTERM)
    for _ in range(3):
        with Signals():
            pass
    assert (threads_and_files(), signal.getsignal(signal.SIGTERM)) == before


def test_in_another_thread_nothing_is_heard_and_nothing_breaks() -> None:
    """Where Python gives no signals the event just stays unset."""
    found: list[bool] = []

    def work() -> None:
        with Signals() as signals:
            found.append(signals.asked.is_set())

    thread = threading.Thread(target=work)
    thread.start()
    thread.join(HEARD_WITHIN)
    assert found == [False]
