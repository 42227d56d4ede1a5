"""Ten million samples: does the principal basis stay orthonormal, finite and right?

``python -m bench principal_soak`` runs it whole, ``--quick`` a hundredth of it. It runs only when
it is asked for by name.
"""

from __future__ import annotations

import time
import warnings

import numpy as np

from bench.harness import Table
from bench.principal import NOISE, feed, sine
from streambasis import PrincipalBasis

SAMPLES = 10_000_000
CHUNK = 20_000
STREAMS = (
    # channels, dtype, forgetting factor, part of the samples
    (16, "float64", 1.0, 1.0),
    (16, "float32", 0.999, 1.0),
    (96, "complex64", 0.999, 0.1),
)


def run(quick: bool) -> list[Table]:
    """Run feeds through chunk by chunk, a tenth of the chunks silent, and audit after each."""
    samples = SAMPLES // 100 if quick else SAMPLES
    table = Table(
        f"Soak of the principal basis: {samples:,} samples",
        ["n", "dtype", "forget", "samples", "loss", "renewals", "rank", "noise : true", "sine",
         "us a sample"],
        notes=[
            "loss: worst orthogonality ratio after any chunk (contract: below 3). noise : true and "
            "the sine of the largest angle to the true subspace at the end. Warnings are errors.",
        ],
    )  # fmt: skip
    for channels, dtype, forget, part in STREAMS:
        rng = np.random.default_rng(channels)
        basis = PrincipalBasis(channels, max_rank=6, forget=forget, dtype=dtype)
        rows = np.zeros((0, channels))
        worst, seconds = 0.0, 0.0
        chunks = max(1, int(part * samples) // CHUNK)
        for chunk in range(chunks):
            if chunk % 32 == 0:
                fresh, rows = feed(rng, CHUNK, channels, 3, NOISE)
                fresh = fresh.astype(dtype)
            silent = forget < 1.0 and chunk % 10 == 4 and chunk < chunks - 1
            given = np.zeros_like(fresh) if silent else rng.permutation(fresh)
            start = time.perf_counter()
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                scores = basis.push_many(given)
            seconds += time.perf_counter() - start
            if np.isnan(scores.spe).any() or np.isnan(scores.t2).any():
                raise RuntimeError(f"{dtype}, forget {forget}: a score of chunk {chunk} is NaN")
            worst = max(worst, basis.audit().orthogonality)
        count = chunks * CHUNK
        # without forgetting the subspaces of all stretches add up
        angle = sine(np.real(basis.vectors), rows) if forget < 1.0 else "n/a"
        noise = basis.noise / NOISE**2 if forget < 1.0 else "n/a"
        table.add(
            channels, dtype, forget, count, worst, basis.audit().renewals, basis.rank, noise,
            angle, 1e6 * seconds / count,
        )  # fmt: skip
    return [table]
