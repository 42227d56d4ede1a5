"""The growing basis: how fast it is beside NumPy and SciPy, and what orthogonality costs."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from bench.harness import Table, interleaved
from streambasis import StreamBasis

ROOT = Path(__file__).parent.parent
SIZES = [(16, 8), (64, 16), (256, 64), (1024, 128)]
LARGE = (65_536, 128)


def run(quick: bool) -> list[Table]:
    """Answer how fast a push is, alone and in batches, and what keeps directions orthonormal."""
    repetitions, seconds = (5, 0.01) if quick else (11, 0.05)
    return [
        single(repetitions, seconds),
        batches(repetitions, seconds, quick),
        bandwidth(repetitions, quick),
        cold_start(2 if quick else 7),
        memory(200_000 if quick else 10_000_000),
        policies(),
        columns(),
        cost(repetitions, seconds),
    ]


def filled(count: int, rank: int, seed: int = 0) -> tuple[StreamBasis, NDArray[Any]]:
    """Return a basis of a rank, and the samples that it was grown by."""
    sources = np.random.default_rng(seed).standard_normal((rank, count))
    basis = StreamBasis(count)
    basis.push_many(sources)
    return basis, sources


def single(repetitions: int, seconds: float) -> Table:
    """One push of a sample in the span, beside two passes of NumPy and an insertion of SciPy."""
    table = Table(
        "One push of a sample that is in the span, float64",
        ["channels", "rank", "push us", "NumPy us", "qr_insert us", "NumPy : push",
         "qr_insert : push", "to reach"],
        headline=True,
        notes=["NumPy: two projection passes and the norm. SciPy: qr_insert of one more column, "
               "taken beside the span, within which it is refused.",
               "Medians of interleaved repetitions, one BLAS thread; only the ratios count."],
    )  # fmt: skip
    for count, rank in SIZES:
        basis, sources = filled(count, rank)
        sample = np.random.default_rng(1).standard_normal(rank) @ sources
        rows = basis.vectors.copy()
        q, r = scipy.linalg.qr(sources.T, mode="economic")
        beside = sample + 1e-3 * np.random.default_rng(6).standard_normal(count)

        def twice(rows: NDArray[Any] = rows, sample: NDArray[Any] = sample) -> float:
            rest = sample - (rows @ sample) @ rows
            rest -= (rows @ rest) @ rows
            return float(np.sqrt(rest @ rest))

        times = interleaved(
            {
                "push": lambda basis=basis, sample=sample: basis.push(sample),
                "numpy": twice,
                "scipy": lambda q=q, r=r, beside=beside, rank=rank: scipy.linalg.qr_insert(
                    q, r, beside, rank, which="col"
                ),
            },
            repetitions=repetitions,
            seconds=seconds,
        )
        push, other, insert = (times[name].median * 1e6 for name in ("push", "numpy", "scipy"))
        least = "3, 6" if count <= 64 else "2, 4"
        table.add(count, rank, push, other, insert, other / push, insert / push, least)
    return table


def batches(repetitions: int, seconds: float, quick: bool) -> Table:
    """A batch of samples in the span, beside the same samples pushed one by one."""
    table = Table(
        "push_many of samples in the span beside one push after another, float64",
        ["channels", "rank", "samples", "push us", "push_many us", "push : push_many", "to reach"],
        headline=True,
        notes=["Time of one sample. Each side takes the same array."],
    )
    sizes = [(64, 16, 1000, 10), (256, 64, 1000, None), (1024, 128, 1000, 2), (*LARGE, 128, 3)]
    for count, rank, number, least in sizes[: 3 if quick else 4]:
        basis, sources = filled(count, rank)
        samples = np.random.default_rng(2).standard_normal((number, rank)) @ sources

        def one_by_one(basis: StreamBasis = basis, samples: NDArray[Any] = samples) -> None:
            for sample in samples:
                basis.push(sample)

        times = interleaved(
            {
                "push": one_by_one,
                "many": lambda basis=basis, samples=samples: basis.push_many(samples),
            },
            repetitions=min(7, repetitions),
            seconds=seconds,
        )
        push, many = (times[name].median / number * 1e6 for name in ("push", "many"))
        table.add(count, rank, number, push, many, push / many, least or "")
    return table


def bandwidth(repetitions: int, quick: bool) -> Table:
    """One push to a basis larger than the caches, beside reading as many bytes once."""
    count, rank = (LARGE[0] // 4, LARGE[1]) if quick else LARGE
    basis, sources = filled(count, rank)
    sample = sources.sum(axis=0)
    elsewhere = basis.vectors.copy()
    times = interleaved(
        {"push": lambda: basis.push(sample), "read": elsewhere.sum},
        repetitions=max(7, repetitions),
        seconds=0.1,
    )
    table = Table(
        "One push to a large basis beside reading it once",
        ["channels", "rank", "MB", "push ms", "read ms", "GB/s read", "push : read", "at most"],
        notes=["Read: NumPy's sum over another array of the same size. A push takes out a group "
               "of directions after reading it, which finds it in cache; every second push walks "
               "the directions backwards and finds the last ones there."],
    )  # fmt: skip
    push, read = times["push"].median, times["read"].median
    table.add(count, rank, elsewhere.nbytes / 1e6, push * 1e3, read * 1e3,
              elsewhere.nbytes / read / 1e9, push / read, 1.4)  # fmt: skip
    return table


def cold_start(repetitions: int) -> Table:
    """Import and first push in processes of their own."""
    scripts = {
        "import numpy, numba": "import numpy, numba",
        "import streambasis": "import streambasis",
        "import streambasis, numpy, numba and the class": (
            "import numpy, numba, streambasis; streambasis.StreamBasis"
        ),
        "first push, warm cache": "import numpy, streambasis; streambasis.StreamBasis",
        "first push, empty cache": "import numpy, streambasis; streambasis.StreamBasis",
    }
    push = "; t = time.perf_counter(); streambasis.StreamBasis(8).push(numpy.ones(8))"
    found: dict[str, list[float]] = {name: [] for name in scripts}
    no_bytecode = shutil.ignore_patterns("__pycache__")
    with tempfile.TemporaryDirectory() as folder:
        for repetition in range(repetitions + 1):
            for name, script in scripts.items():
                if name.endswith("empty cache") and repetition > 1:
                    continue
                root, cache = ROOT, Path(folder, "warm")
                if name.endswith("empty cache"):
                    # a copy of the package, since compiled kernels are also kept in it
                    root, cache = Path(folder, f"copy{repetition}"), Path(folder, str(repetition))
                    shutil.copytree(ROOT / "streambasis", root / "streambasis", ignore=no_bytecode)
                code = f"import time; t = time.perf_counter(); {script}"
                code += push if name.startswith("first") else ""
                took = _process(f"{code}; print(time.perf_counter() - t)", cache, root)
                if repetition:  # the first round fills the caches of the disk
                    found[name].append(took)
    table = Table(
        "Cold start", ["what", "seconds", "beside import numpy, numba", "to reach"],
        notes=["Median over processes of their own. First push: constructing a basis and pushing "
               "to it, after the imports; with an empty cache it compiles."],
    )  # fmt: skip
    base = float(np.median(found["import numpy, numba"]))
    goals = ["", "at most 1.2 times", "at most 1.2 times", "below 0.5 s", ""]
    for (name, times), goal in zip(found.items(), goals, strict=True):
        took = float(np.median(times))
        table.add(name, took, took / base, goal)
    return table


def _process(code: str, cache: Path, root: Path) -> float:
    environment = {**os.environ, "PYTHONPATH": str(root), "STREAMBASIS_CACHE_DIR": str(cache)}
    done = subprocess.run(
        [sys.executable, "-c", code],
        env=environment,
        cwd="/",  # the package is the one of the root and no other
        capture_output=True,
        text=True,
        check=True,
    )
    return float(done.stdout)


def memory(pushes: int) -> Table:
    """Resident memory of a process that pushes on and on."""
    code = f"""
import json, os, resource
import numpy as np
from streambasis import StreamBasis
page = resource.getpagesize()
rng = np.random.default_rng(0)
sources = rng.standard_normal((16, 64))
samples = list(rng.standard_normal((1000, 16)) @ sources)
basis = StreamBasis(64)
def resident():
    with open("/proc/self/statm") as file:
        return int(file.read().split()[1]) * page / 1e6
def push(rounds):
    for _ in range(rounds):
        for sample in samples:
            basis.push(sample)
push(10)
found = [resident()]
for _ in range(5):
    push({pushes} // 5000)
    found.append(resident())
print(json.dumps([found, basis.nbytes, basis.count]))
"""
    done = subprocess.run(
        [sys.executable, "-c", code], env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    found, held, count = json.loads(done.stdout)
    table = Table(
        "Resident memory while pushing, 64 channels, rank 16",
        ["pushes", "MB at the start", "MB at the end", "largest MB", "bytes held by the basis"],
    )
    table.add(count, found[0], found[-1], max(found), held)
    return table


def matrices() -> dict[str, NDArray[Any]]:
    """Return matrices whose columns are samples, by name."""
    rng = np.random.default_rng(3)
    left, right = (np.linalg.qr(rng.standard_normal((80, 80)))[0] for _ in range(2))
    n = 13
    v = np.arange(1.0, n + 1)
    reflection = np.eye(n) - 2 * np.outer(v, v) / (v @ v)
    return {
        "Läuchli, e = 1e-4": np.vstack([np.ones(3), 1e-4 * np.eye(3)]),
        "Läuchli, e = 1e-8": np.vstack([np.ones(3), 1e-8 * np.eye(3)]),
        "Hilbert, order 8": scipy.linalg.hilbert(8),
        "Hilbert, order 12": scipy.linalg.hilbert(12),
        "Giraud & Langou, n = 13": reflection @ (0.101 * np.eye(n) + np.diag(np.ones(n - 1), 1)),
        "Trefethen & Bau, 40 columns": (left * 2.0 ** -np.arange(1, 81)) @ right[:, :40],
        "well-conditioned 80x40": left[:, :40] * np.linspace(1, 2, 40),
    }


def classical(columns_: NDArray[Any]) -> NDArray[Any]:
    """Return the directions of classical Gram-Schmidt, one pass, as rows."""
    rows = np.empty((columns_.shape[1], columns_.shape[0]))
    for j, column in enumerate(columns_.T):
        rest = column - (rows[:j] @ column) @ rows[:j]
        rows[j] = rest / np.linalg.norm(rest)
    return rows


def grown(columns_: NDArray[Any], policy: str) -> tuple[NDArray[Any], int]:
    """Return the directions of a basis, and the passes that it spent."""
    basis = StreamBasis(len(columns_), rtol=0.0, reorthogonalize=policy)
    passes = sum(basis.push(column).passes for column in columns_.T)
    return basis.vectors, passes


def loss(rows: NDArray[Any]) -> float:
    """Return the 2-norm of V Vᵀ - I."""
    return float(np.linalg.norm(rows @ rows.T - np.eye(len(rows)), 2))


def policies() -> Table:
    """What each way of orthogonalizing loses, and the passes it spends."""
    table = Table(
        "Loss of orthogonality |V Vᵀ - I| and passes",
        ["samples", "condition", "classical", "never", "criterion", "always", "Householder",
         "passes: never", "criterion", "always"],
        notes=["never: modified Gram-Schmidt, one pass. criterion: a second pass where Giraud & "
               "Langou (2003) ask for one. Householder: LAPACK's QR."],
    )  # fmt: skip
    for name, matrix in matrices().items():
        ours = {policy: grown(matrix, policy) for policy in ("never", "criterion", "always")}
        table.add(
            name,
            float(np.linalg.cond(matrix)),
            loss(classical(matrix)),
            *(loss(rows) for rows, _ in ours.values()),
            loss(np.linalg.qr(matrix)[0].T),
            *(passes for _, passes in ours.values()),
        )
    return table


def columns() -> Table:
    """Orthogonality of each new direction in the 80x80 experiment of Trefethen & Bau."""
    rng = np.random.default_rng(4)
    left, right = (np.linalg.qr(rng.standard_normal((80, 80)))[0] for _ in range(2))
    matrix = (left * 2.0 ** -np.arange(1, 81)) @ right.T
    sides = {
        "classical": classical(matrix),
        "never": grown(matrix, "never")[0],
        "criterion": grown(matrix, "criterion")[0],
    }
    table = Table(
        "Largest inner product of direction j with those before it, singular values 2^-1 to 2^-80",
        ["j", *sides],
        notes=["Trefethen & Bau (1997), Numerical Linear Algebra, Lecture 9. The basis takes no "
               "direction below the rounding floor: its rank ends near 58."],
    )  # fmt: skip
    for j in (2, 5, 10, 15, 20, 25, 30, 35, 40, 45, 50, 55):
        found = [np.abs(rows[: j - 1] @ rows[j - 1]).max() if j <= len(rows) else None
                 for rows in sides.values()]  # fmt: skip
        table.add(j, *(("" if value is None else float(value)) for value in found))
    return table


def cost(repetitions: int, seconds: float) -> Table:
    """What the policies cost in time, growing and in the steady state."""
    table = Table(
        "Time of the policies, 256 channels, rank 64",
        ["policy", "grow us", "in the span us", "grow : never", "in the span : never"],
        notes=["grow: 64 Gaussian samples pushed to an empty basis, per sample."],
    )
    sources = np.random.default_rng(5).standard_normal((64, 256))
    sample = sources.sum(axis=0)

    def growing(policy: str) -> Callable[[], None]:
        def grow() -> None:
            basis = StreamBasis(256, reorthogonalize=policy)
            for row in sources:
                basis.push(row)

        return grow

    names = ("never", "criterion", "always")
    steady = {}
    for policy in names:
        basis = StreamBasis(256, reorthogonalize=policy)
        basis.push_many(sources)
        steady[policy] = lambda basis=basis: basis.push(sample)
    grow_times = interleaved({p: growing(p) for p in names}, repetitions=repetitions,
                             seconds=seconds)  # fmt: skip
    span_times = interleaved(steady, repetitions=repetitions, seconds=seconds)
    for policy in names:
        grow, span = grow_times[policy].median / 64 * 1e6, span_times[policy].median * 1e6
        table.add(policy, grow, span, grow_times[policy].median / grow_times["never"].median,
                  span_times[policy].median / span_times["never"].median)  # fmt: skip
    return table
