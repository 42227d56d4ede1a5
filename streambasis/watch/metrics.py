"""The readings of a run as metrics in the OpenMetrics format."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Iterable, Iterator
from typing import NamedTuple

from prometheus_client import CollectorRegistry, ProcessCollector
from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    InfoMetricFamily,
    Metric,
)
from prometheus_client.registry import Collector

from streambasis._version import __version__
from streambasis.watch.health import Health
from streambasis.watch.vitals import Vitals

PACE_SECONDS = 10.0
"""Seconds over which samples per second are taken, where the daemon is asked that often."""


class _Reading(NamedTuple):
    """A metric that is a field of the readings; their name in the text is ``streambasis_`` on."""

    name: str
    field: str
    help: str


COUNTERS = (
    _Reading("samples", "samples", "Samples taken."),
    _Reading("novel_samples", "novel", "Samples beyond the limit of their squared error."),
    _Reading("events", "events", "Events opened."),
    _Reading("renewals", "renewals", "Times that the basis was made orthonormal again."),
    _Reading("audits", "audits", "Audits of the basis by this process."),
    _Reading("failed_audits", "failed_audits", "Audits that failed."),
    _Reading("malformed_rows", "malformed", "Rows or messages that hold no sample."),
    _Reading("dropped", "dropped", "Messages dropped because the machine did not keep up."),
    _Reading("duplicates", "duplicates", "Messages recognised as taken before."),
    _Reading("connections", "connections", "Connections made to a broker."),
    _Reading("sessions_lost", "sessions_lost", "Times that the broker had forgotten the session."),
    _Reading("restarts", "restarts", "Earlier processes of this run."),
)
GAUGES = (
    _Reading("open_events", "open_events", "Events that are open."),
    _Reading("spe", "spe", "Squared prediction error of the newest sample."),
    _Reading("spe_limit", "limit", "Its control limit."),
    _Reading("rank", "rank", "Directions of the basis."),
    _Reading("noise_floor", "noise", "Variance per residual dimension, in units of the noise."),
    _Reading(
        "orthogonality_defect", "orthogonality", "At the last audit; the contract is below 3."
    ),
    _Reading("queue_depth", "queue", "Messages that wait."),
    _Reading("snapshot_bytes", "snapshot_bytes", "Size of the last snapshot."),
)
# times, not ages: an age goes stale between two looks and stands still when the daemon hangs
TIMES = (
    _Reading("sample_timestamp_seconds", "sample_time", "Time stamp of the newest sample."),
    _Reading("taken_timestamp_seconds", "taken_at", "When the newest samples were taken."),
    _Reading("snapshot_timestamp_seconds", "committed_at", "When the last snapshot was written."),
)


class Pace:
    """Samples per second, from counts at the times somebody asked.

    Parameters
    ----------
    now : float
        Monotonic clock.

    Notes
    -----
    The rate is that since the newest earlier look which lies at least PACE_SECONDS back, or else
    the oldest, so that several who ask do not shorten each other's interval. Looks are kept a
    second apart and no longer than needed.
    """

    def __init__(self, now: float) -> None:
        self._looks = deque([(now, 0)], maxlen=int(PACE_SECONDS) + 2)

    def at(self, now: float, count: int) -> float:
        """Return the rate now."""
        while len(self._looks) > 1 and now - self._looks[1][0] >= PACE_SECONDS:
            self._looks.popleft()
        then, before = self._looks[0]
        if now - self._looks[-1][0] >= 1.0:
            self._looks.append((now, count))
        # a run that went back to its last commit has fewer samples than it had
        return max(0, count - before) / max(now - then, 1e-3)


class RunCollector(Collector):
    """Reads the vitals of a run when somebody asks; costs the run nothing.

    Parameters
    ----------
    vitals : Vitals
        Written by the loop.
    health : Health
        Judges them.

    Notes
    -----
    No metric but the version has a label, so there are as many series as names. The fields are
    written one after another: a reading may hold some of the batch before and some of this one.
    """

    def __init__(self, vitals: Vitals, health: Health) -> None:
        self._vitals = vitals
        self._health = health
        self._pace = Pace(time.monotonic())

    def collect(self) -> Iterable[Metric]:
        """Yield the metrics."""
        vitals = self._vitals
        for kind, readings in ((CounterMetricFamily, COUNTERS), (GaugeMetricFamily, GAUGES)):
            for name, field, text in readings:
                yield kind(f"streambasis_{name}", text, value=getattr(vitals, field))
        yield from self._times()
        pace = self._pace.at(time.monotonic(), vitals.samples)
        yield GaugeMetricFamily("streambasis_samples_per_second", "Samples taken.", value=pace)
        yield GaugeMetricFamily(
            "streambasis_healthy", "1 while /healthz says so.", value=not self._health.reasons()
        )
        yield GaugeMetricFamily(
            "streambasis_disk_refuses",
            "1 while the disk does not take what the run keeps.",
            value=vitals.unkept is not None,
        )
        yield InfoMetricFamily("streambasis_build", "What runs.", {"version": __version__})

    def _times(self) -> Iterator[Metric]:
        vitals = self._vitals
        for name, field, text in TIMES:
            moment = getattr(vitals, field)
            if moment is not None:
                yield GaugeMetricFamily(f"streambasis_{name}", text, value=moment)
        if vitals.sample_time is not None and vitals.taken_at is not None:
            yield GaugeMetricFamily(
                "streambasis_lag_seconds",
                "How old the newest sample was, by its time stamp, when it was taken.",
                value=vitals.taken_at - vitals.sample_time,
            )


def registry_of(vitals: Vitals, health: Health) -> CollectorRegistry:
    """Return a registry of its own for a run: its readings, and memory and files of the process."""
    registry = CollectorRegistry()
    registry.register(RunCollector(vitals, health))
    ProcessCollector(registry=registry)
    return registry
