"""Health: what is wrong with a run, in sentences, and nothing while all is well."""

from __future__ import annotations

import time

from streambasis.watch.health import Health
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
