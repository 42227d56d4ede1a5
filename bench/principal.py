"""How fast and how close the principal basis follows a noisy feed.

``python -m bench principal`` compares scoring and folding every sample with the incremental
principal component analysis of scikit-learn (which folds but does not score), both on one BLAS
thread. The long run is ``python -m bench principal_soak``.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.decomposition import IncrementalPCA

from bench.harness import Table, interleaved, one_blas_thread
from streambasis import PrincipalBasis

SIZES = ((32, 8), (256, 24), (1024, 48))
NOISE = 0.2


def feed(
    rng: np.random.Generator, samples: int, channels: int, sources: int, noise: float
) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return a feed of sources with a mean square of 1, 1/2, 1/3, ... a channel, and their span."""
    rows = np.linalg.qr(rng.standard_normal((channels, sources)))[0].T
    scales = np.sqrt(channels / np.arange(1.0, sources + 1))
    signal = (rng.standard_normal((samples, sources)) * scales) @ rows
    return signal + noise * rng.standard_normal((samples, channels)), rows


def sine(a: NDArray[Any], b: NDArray[Any]) -> float:
    """Return the sine of the largest angle between the spans of orthonormal rows."""
    return float(np.linalg.norm(b - (b @ a.T) @ a, 2))


def batch_sine(samples: NDArray[Any], rows: NDArray[Any]) -> float:
    """Return the angle that one SVD of all samples leaves."""
    _, _, vectors = np.linalg.svd(samples, full_matrices=False)
    return sine(vectors[: len(rows)], rows)


def turns(call: Callable[[NDArray[Any]], Any], samples: NDArray[Any], block: int) -> Any:
    """Return a callable that hands the next block of the samples over, for ever."""
    starts = list(range(0, len(samples) - block + 1, block))
    position = -1

    def turn() -> None:
        nonlocal position
        position = (position + 1) % len(starts)
        call(samples[starts[position] : starts[position] + block])

    return turn


def against_incremental(quick: bool) -> Table:
    """Time both at the same block of 2k, and at the block that suits each best."""
    table = Table(
        "Scoring and folding every sample, against IncrementalPCA.partial_fit (no scores)",
        ["n", "k", "block", "ours µs/sample", "theirs µs/sample", "ratio", "angle : batch",
         "theirs : batch"],
        headline=True,
    )  # fmt: skip
    repetitions, seconds = (7, 0.01) if quick else (11, 0.1)
    for channels, rank in SIZES:
        rng = np.random.default_rng(channels)
        samples, rows = feed(rng, 768 if quick else 2048, channels, rank, NOISE)
        batch = batch_sine(samples, rows)
        blocks = [2 * rank] if quick else [rank, 2 * rank, 4 * rank, 8 * rank]
        blocks += [256] if channels == 32 else []
        micros: dict[str, dict[int, float]] = {"ours": {}, "theirs": {}}
        close: dict[str, dict[int, float]] = {"ours": {}, "theirs": {}}
        for block in blocks:
            basis = PrincipalBasis(channels, rank=rank, block=block, centre=True)
            theirs = IncrementalPCA(rank)
            basis.push_many(samples)
            basis.flush()
            for piece in np.array_split(samples, len(samples) // max(block, rank)):
                theirs.partial_fit(piece)
            close["ours"][block] = sine(basis.vectors, rows) / batch
            close["theirs"][block] = sine(theirs.components_, rows) / batch
            timed = interleaved(
                {
                    "ours": turns(basis.push_many, samples, block),
                    "theirs": turns(theirs.partial_fit, samples, block),
                },
                repetitions=repetitions,
                seconds=seconds,
            )
            for side, timing in timed.items():
                micros[side][block] = 1e6 * timing.median / block
        best = {side: min(found, key=found.__getitem__) for side, found in micros.items()}
        for label, ours, their in (
            (str(2 * rank), 2 * rank, 2 * rank),
            (f"best: {best['ours']} : {best['theirs']}", best["ours"], best["theirs"]),
        ):
            mine, other = micros["ours"][ours], micros["theirs"][their]
            table.add(
                channels, rank, label, mine, other, other / mine,
                close["ours"][ours], close["theirs"][their],
            )  # fmt: skip
    table.notes.append(
        "angle : batch is the largest angle to the true subspace over that of one SVD of all "
        "samples (sine); both sides keep a mean. With 32 channels the core goes through its Gram "
        "matrix; with more, blocks are folded in one pass but for the first ones."
    )
    return table


def products(held: int, samples: NDArray[Any]) -> Callable[[], None]:
    """Return what neither scores nor a fold of a block can do without: B·Vᴴ and CᴴB."""
    rng = np.random.default_rng(held)
    directions = np.linalg.qr(rng.standard_normal((samples.shape[1], held)))[0].T.copy()

    def both() -> None:
        (samples @ directions.T).T @ samples

    return both


def singly(quick: bool) -> Table:
    """Time push_many against push, what scoring alone costs, and the floor of both."""
    table = Table(
        "Batches against single samples, default block (µs/sample)",
        [
            "n",
            "k",
            "block",
            "push",
            "push_many",
            "ratio",
            "score_many",
            "products",
            "bound",
        ],
        headline=True,
    )
    for channels, rank in SIZES:
        rng = np.random.default_rng(channels)
        samples, _ = feed(rng, 4096, channels, rank, NOISE)
        many, single, scored = (PrincipalBasis(channels, rank=rank) for _ in range(3))
        for basis in (many, single, scored):
            basis.push_many(samples)
        block = many.block

        def push(piece: NDArray[Any], basis: PrincipalBasis = single) -> None:
            for sample in piece:
                basis.push(sample)

        held = many.to_state().facts["limit"]
        timed = interleaved(
            {
                "push": turns(push, samples, block),
                "push_many": turns(many.push_many, samples, block),
                "score_many": turns(scored.score_many, samples, block),
                "products": products(held, samples[:block]),
            },
            repetitions=7 if quick else 11,
            seconds=0.01 if quick else 0.1,
        )
        micros = {side: 1e6 * timing.median / block for side, timing in timed.items()}
        least = micros["products"]
        table.add(
            channels, rank, block, micros["push"], micros["push_many"],
            micros["push"] / micros["push_many"], micros["score_many"], least,
            (micros["push"] - micros["push_many"] + least) / least,
        )  # fmt: skip
    table.notes.append(
        "products: two matrix products of a block with the directions held, which scores and folds "
        "need either way. bound is what the ratio were if a batch cost nothing else "
        "and push saved as much."
    )
    return table


def closeness(quick: bool) -> Table:
    """Compare the angle to the true subspace with that of the batch SVD, cut at the true rank."""
    blocks = (16, 64) if quick else (1, 16, 64)
    table = Table(
        "Angle to the true subspace over that of the batch SVD, cut at the true rank (sine)",
        ["n", "noise", "batch angle", *(f"block {block}" for block in blocks)],
    )
    for channels in (32, 256, 1024):
        for noise in (0.01, 0.2):
            rng = np.random.default_rng(channels)
            rows = np.linalg.qr(rng.standard_normal((channels, 4)))[0].T
            signal = rng.standard_normal((300 if quick else 1000, 4)) @ rows
            samples = signal + noise * rng.standard_normal((len(signal), channels))
            batch = batch_sine(samples, rows)
            ratios = []
            for block in blocks:
                basis = PrincipalBasis(channels, rank=4, block=block)
                basis.take_many(samples)
                basis.flush()
                ratios.append(sine(basis.vectors, rows) / batch)
            table.add(channels, noise, batch, *ratios)
    table.notes.append("Four sources of variance 1, noise on every channel as given.")
    return table


def run(quick: bool) -> list[Table]:
    """Answer the question."""
    # scikit-learn has loaded a BLAS of its own since the limit outside was set
    with one_blas_thread():
        return [against_incremental(quick), singly(quick), closeness(quick)]
