"""The sliding window: what a slide costs beside scipy's updates, starting over, and a plain push.

``python -m bench window``; the soak of the window is a question of its own, ``window_soak``.
"""

from __future__ import annotations

import itertools
import subprocess
import sys
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.linalg

from bench.harness import Table, interleaved
from streambasis import StreamBasis

INDEPENDENT = ((64, 32), (256, 64), (1024, 128))
REDUNDANT = ((64, 16), (256, 64))
WINDOWS = (1_000, 100_000)
MEMORY = """
import sys, resource
import numpy as np
from streambasis import StreamBasis

def resident():
    with open("/proc/self/statm") as file:
        return int(file.read().split()[1]) * resource.getpagesize()

kept, rank, channels = map(int, sys.argv[1:])
rng = np.random.default_rng(0)
sources = rng.standard_normal((rank, channels))
block = rng.standard_normal((500, rank)) @ sources
warm = StreamBasis(channels, window=600)
warm.push_many(block)
warm.push_many(block)
warm.push(block[0])
before = resident()
basis = StreamBasis(channels, window=kept)
for _ in range(kept // len(block) + 2):
    basis.push_many(block)
print(basis.rank, basis.nbytes, resident() - before)
"""


def run(quick: bool) -> list[Table]:
    """Answer the questions of this module."""
    seconds = 0.005 if quick else 0.08
    return [
        independent(INDEPENDENT[:2] if quick else INDEPENDENT, seconds),
        redundant(REDUNDANT[:1] if quick else REDUNDANT, seconds),
        memory((20_000 if quick else 100_000), 64, 128),
    ]


def slides(basis: StreamBasis, samples: np.ndarray) -> Callable[[], Any]:
    """Return a call that pushes the next of some samples."""
    push, following = basis.push, itertools.cycle(samples)
    return lambda: push(next(following))


def independent(sizes: tuple[tuple[int, int], ...], seconds: float) -> Table:
    """All samples independent, window = rank: each slide drops a direction and adds one."""
    table = Table(
        "One slide of a window of independent samples (one leaves, one enters)",
        ["n", "window", "ours us", "scipy us", "scratch us", "scipy/ours", "scratch/ours", "loss"],
        headline=True,
        notes=[
            "scipy: qr_delete of the first column and qr_insert of the new one, economic, no "
            "finiteness checks; scratch: numpy.linalg.qr of the window; ours: StreamBasis.push.",
            "loss: orthogonality ratio of our directions at the end (contract: below 3).",
        ],
    )
    for channels, kept in sizes:
        rng = np.random.default_rng(channels)
        samples = rng.standard_normal((4 * kept, channels))
        basis = StreamBasis(channels, window=kept)
        basis.push_many(samples)
        held = list(scipy.linalg.qr(samples[:kept].T, mode="economic"))
        following = itertools.cycle(samples)

        def update(held=held, following=following, kept=kept) -> None:
            q, r = scipy.linalg.qr_delete(*held, 0, which="col", check_finite=False)
            held[:] = scipy.linalg.qr_insert(
                q, r, next(following), kept - 1, which="col", check_finite=False
            )

        window = np.asfortranarray(samples[:kept].T)
        times = interleaved(
            {
                "ours": slides(basis, samples),
                "scipy": update,
                "scratch": lambda window=window: np.linalg.qr(window),
            },
            seconds=seconds,
        )
        ours, other, scratch = (times[side].median for side in ("ours", "scipy", "scratch"))
        table.add(
            channels,
            kept,
            ours * 1e6,
            other * 1e6,
            scratch * 1e6,
            other / ours,
            scratch / ours,
            basis.audit().orthogonality,
        )
    return table


def redundant(sizes: tuple[tuple[int, int], ...], seconds: float) -> Table:
    """A feed of few directions: pivots are exchanged now and then, nothing is dropped."""
    table = Table(
        "One slide of a redundant feed, beside a push without a window at the same rank",
        ["n", "rank", "push us", *[f"W={w:,} us" for w in WINDOWS], "slide/push", "long/short"],
        notes=["slide/push is taken at the shorter window, long/short between the two windows."],
    )
    for channels, rank in sizes:
        rng = np.random.default_rng(rank)
        sources = rng.standard_normal((rank, channels))
        samples = rng.standard_normal((5_000, rank)) @ sources
        plain = StreamBasis(channels)
        plain.push_many(samples)
        sides = {"push": slides(plain, samples)}
        for kept in WINDOWS:
            basis = StreamBasis(channels, window=kept)
            for _ in range(kept // len(samples) + 1):
                basis.push_many(samples)
            sides[str(kept)] = slides(basis, samples)
        times = interleaved(sides, seconds=seconds)
        push, short, long = (times[side].median for side in sides)
        table.add(channels, rank, push * 1e6, short * 1e6, long * 1e6, short / push, long / short)
    return table


def memory(kept: int, rank: int, channels: int) -> Table:
    """``nbytes`` beside what the process gains."""
    table = Table(
        "Memory of a window",
        ["W", "rank", "n", "nbytes MB", "process MB", "nbytes/process"],
        notes=["Resident memory of a fresh process before and after the window is filled."],
    )
    shown = subprocess.run(
        [sys.executable, "-c", MEMORY, str(kept), str(rank), str(channels)],
        capture_output=True,
        text=True,
        check=True,
    )
    found, told, gained = map(int, shown.stdout.split())
    table.add(kept, found, channels, told / 1e6, gained / 1e6, told / gained)
    return table
