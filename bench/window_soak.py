"""Ten million slides: does anything drift?

``python -m bench window_soak`` runs it whole, ``--quick`` a thousandth of it; the variable
``WINDOW_SOAK_SLIDES`` sets another length. It runs only when it is asked for by name.
"""

from __future__ import annotations

import os
import time
from collections.abc import Iterator

import numpy as np

from bench.harness import Table
from streambasis import StreamBasis
from streambasis.audit import unit_roundoff
from streambasis.kernels import exchange

SLIDES = 10_000_000
CHECKPOINTS = 40
BLOCK = 500


def run(quick: bool) -> list[Table]:
    """Slide over five streams and check at every checkpoint."""
    slides = int(os.environ.get("WINDOW_SOAK_SLIDES", SLIDES // 1000 if quick else SLIDES))
    table = Table(
        f"Soak of the window: {slides:,} slides in all",
        ["stream", "dtype", "n", "W", "slides", "loss", "error of C", "coverage", "wrong rank",
         "renewals", "us a slide"],
        notes=[
            f"Worst of {CHECKPOINTS} checkpoints each. loss: orthogonality ratio (contract: below "
            "3). error of C: samples of the window against coordinates times directions beyond "
            "what they are known to have lost, in the same unit. wrong rank: checkpoints where the "
            "rank differs from that of a singular value decomposition.",
        ],
    )  # fmt: skip
    kinds = [
        ("a rotation at every step", "float64", 16, 15),
        ("a rotation at every step", "complex128", 16, 15),
        ("a rotation at every step", "float32", 32, 24),
        ("few directions that come and go", "float64", 24, 40),
        ("taken back at random", "float64", 12, 10),
    ]
    for kind, dtype, channels, kept in kinds:
        soak(table, kind, dtype, channels, kept, slides // len(kinds))
    return [table]


def stream(kind: str, dtype: str, channels: int) -> Iterator[np.ndarray]:
    """Yield blocks of samples for ever."""
    rng = np.random.default_rng(channels)

    def drawn(*shape: int) -> np.ndarray:
        out = rng.standard_normal(shape)
        return out + 1j * rng.standard_normal(shape) if np.dtype(dtype).kind == "c" else out

    sources = drawn(channels // 2, channels)
    while True:
        if kind.startswith("few"):
            active = rng.random((BLOCK, len(sources))) < rng.uniform(0.01, 0.3)
            yield ((drawn(BLOCK, len(sources)) * active) @ sources).astype(dtype)
        else:
            yield drawn(BLOCK, channels).astype(dtype)


def soak(table: Table, kind: str, dtype: str, channels: int, kept: int, slides: int) -> None:
    """Slide over one stream and add its row."""
    basis = StreamBasis(channels, window=kept, dtype=dtype)
    rng = np.random.default_rng(1)
    blocks = stream(kind, dtype, channels)
    taken: dict[int, np.ndarray] = {}
    loss = error = coverage = 0.0
    wrong = done = 0
    spent = 0.0
    checkpoints = max(1, min(CHECKPOINTS, slides // BLOCK))
    for checkpoint in range(1, checkpoints + 1):
        while done < slides * checkpoint // checkpoints:
            block = next(blocks)
            start = time.perf_counter()
            first = basis.count
            if kind.startswith("taken"):
                for sample in block:
                    basis.push(sample)
                    if rng.random() < 0.3:
                        basis.retract(int(rng.choice(basis.members)))
            else:
                basis.push_many(block)
            spent += time.perf_counter() - start
            done += len(block)
            taken = {
                number: sample
                for number, sample in [*taken.items(), *enumerate(block, first)]
                if number >= first + len(block) - 20 * kept
            }
        members = basis.members
        rows = np.array([taken[int(number)] for number in members])
        audit = basis.audit()
        loss, coverage = max(loss, audit.orthogonality), max(coverage, audit.coverage)
        error = max(error, reproduction(basis, rows))
        lengths = np.linalg.norm(rows, axis=1, keepdims=True)
        unit = np.divide(rows, lengths, out=np.zeros_like(rows), where=lengths > 0)
        values = np.linalg.svd(unit, compute_uv=False)
        wrong += int((values > np.finfo(dtype).eps ** 0.5).sum()) != basis.rank
    table.add(kind, dtype, channels, kept, done, loss, error, coverage, wrong,
              basis.audit().renewals, spent / done * 1e6)  # fmt: skip


def reproduction(basis: StreamBasis, rows: np.ndarray) -> float:
    """Return the error of the coordinates kept, in units of max(n, 16) roundoffs."""
    arrays = basis.to_state().parts["core"].arrays
    members, sizes = arrays["members"], arrays["sizes"]
    order = np.argsort(members[:, exchange.ID])
    order = order[members[order, exchange.ID] != exchange.NONE]
    wide = np.complex128 if rows.dtype.kind == "c" else np.float64
    powers = np.ldexp(1.0, -members[order, exchange.EXPONENT])
    scaled = rows.astype(wide) * powers[:, None]
    made = arrays["coordinates"][order].astype(wide) @ arrays["vectors"].astype(wide)
    outside = np.linalg.norm(scaled - made, axis=1)
    beyond = np.maximum(outside - sizes[order, exchange.LOST], 0.0)
    lengths = np.maximum(sizes[order, exchange.LENGTH], 0.5)
    unit = max(rows.shape[1], 16) * unit_roundoff(rows.dtype)
    return float((beyond / lengths).max(initial=0.0) / unit)
