"""The daemon: nothing lost or doubled by kills, throughput, latency, and a soak that stays flat."""

from __future__ import annotations

import os

from bench.daemon_kills import killed
from bench.daemon_latency import latency
from bench.daemon_soak import soak
from bench.daemon_throughput import throughput
from bench.harness import Table

SOAK_MINUTES = "STREAMBASIS_SOAK_MINUTES"
"""Environment variable: how long the soak takes instead of 3 minutes."""


def run(quick: bool) -> list[Table]:
    """Answer all of it."""
    minutes = float(os.environ.get(SOAK_MINUTES, 0.15 if quick else 3))
    return [
        killed(6 if quick else 200),
        throughput(50_000 if quick else 400_000),
        latency(4.0 if quick else 30.0),
        soak(60 * minutes),
    ]
