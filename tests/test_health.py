"""Health: what is wrong with a run, in sentences, and nothing while all is well."""

from __future__ import annotations

import time

from streambasis.watch.health import REPEAT_SECONDS, Health, Listener
from streambasis.watch.vitals import Vitals


def test_a_run_that_does_its_work_is_healthy() -> None:
    """Samples come, the disk takes them, the last audit passed."""
    vitals = Vitals(taken_at=time.time() - 5, failed_audits=1, dropped=9, malformed=9)
    assert Health(vitals, silent_after=60).reasons() == []


def test_silence_counts_from_the_newest_sample() -> None:
    """Longer than allowed is a reason, named with what keeps samples from coming."""
    vitals = Vitals(taken_at=time.time() - 90)
    health = Health(vitals, silent_after=60, trouble=lambda: "the connection is lost")
    (reason,) = health.reasons()
    assert reason == "feed: nothing has come for 90 s, allowed are 60 s (the connection is lost)"
    vitals.taken_at = time.time()
    assert health.reasons() == []


def test_silence_counts_from_the_opening_where_nothing_ever_came() -> None:
    """A feed that never speaks is silent too, and 0 waits for ever."""
    health = Health(Vitals(), silent_after=0.001)
    time.sleep(0.01)
    assert len(health.reasons()) == 1
    health.silent_after = 0.0
    assert health.reasons() == []


def test_disk_and_audit_are_reasons_of_their_own() -> None:
    """Each trouble is told, and goes when it has gone."""
    vitals = Vitals(unkept="run: cannot be written (No space left on device)", unsound="defect 7")
    health = Health(vitals)
    assert health.reasons() == [
        "disk: run: cannot be written (No space left on device)",
        "audit: defect 7",
    ]
    vitals.unkept = vitals.unsound = None
    assert health.reasons() == []


def test_what_changes_is_said_once_and_when_it_is_over() -> None:
    """A lost connection is one line, its return another; nothing while nothing changes."""
    said: list[str] = []
    trouble = [""]
    listener = Listener(Health(Vitals(), trouble=lambda: trouble[0]), said.append)
    now = 1000.0
    for trouble[0] in ("", "the connection is lost", "the connection is lost", "", ""):
        listener.look(now)
        now += REPEAT_SECONDS
    assert said == ["feed: the connection is lost", "feed: connected again"]


def test_a_connection_that_comes_and_goes_is_said_once_a_minute() -> None:
    """However often it changes; what is said last is true."""
    said: list[str] = []
    trouble = [""]
    listener = Listener(Health(Vitals(), trouble=lambda: trouble[0]), said.append)
    for second in range(600):
        trouble[0] = "lost" if second % 2 else ""
        listener.look(1000.0 + second)
    assert 5 <= len(said) <= 600 // REPEAT_SECONDS + 1
    trouble[0] = ""
    listener.look(5000.0)
    listener.look(6000.0)
    assert said[-1] == "feed: connected again"


def test_each_session_that_a_broker_forgot_is_said() -> None:
    """Once for each time: here messages may be lost."""
    said: list[str] = []
    vitals = Vitals()
    listener = Listener(Health(vitals), said.append)
    for vitals.sessions_lost in (0, 1, 1, 2):
        listener.look(0.0)
    assert len(said) == 2
    assert said[0].startswith("feed: the broker had forgotten our session")


def test_silence_is_said_without_anybody_asking_for_health() -> None:
    """The thread looks by itself, and ends with the block."""
    said: list[str] = []
    vitals = Vitals(taken_at=time.time() - 90)
    with Listener(Health(vitals, silent_after=60), said.append) as listener:
        deadline = time.monotonic() + 30
        while not said and time.monotonic() < deadline:
            time.sleep(0.05)
    (line,) = said
    assert line.startswith("feed: nothing has come for 9")
    vitals.taken_at = time.time()
    listener.look(time.monotonic() + REPEAT_SECONDS)
    assert said[1:] == ["feed: samples come again"]
