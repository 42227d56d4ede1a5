"""Interleaved timing, ratio tables and their JSON: what every benchmark shares.

A speed is a ratio within one run: the sides take turns, repetition by repetition, so that a noisy
machine hits them alike, and all run on one BLAS thread.
"""

from __future__ import annotations

import gc
import os
import platform
import statistics
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any


@dataclass
class Table:
    """One question with its answer, row by row.

    A headline stands in the README too.
    """

    title: str
    columns: list[str]
    rows: list[list[Any]] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    headline: bool = False

    def add(self, *values: Any) -> None:
        """Append a row; one value per column."""
        if len(values) != len(self.columns):
            raise ValueError(f"{self.title}: {len(values)} values for {len(self.columns)} columns")
        self.rows.append(list(values))

    def markdown(self) -> str:
        """Return the table as Markdown."""
        cells = [[_cell(v) for v in row] for row in self.rows]
        head = [f"### {self.title}", "", "| " + " | ".join(self.columns) + " |"]
        head.append("|" + " --- |" * len(self.columns))
        body = ["| " + " | ".join(row) + " |" for row in cells]
        return "\n".join(head + body + [""] + [f"{note}  " for note in self.notes])


def _cell(value: Any) -> str:
    if isinstance(value, float):
        return f"{value:.3g}" if abs(value) < 1e4 else f"{value:,.0f}"
    return str(value)


@dataclass(frozen=True)
class Timing:
    """Seconds per call of one side: the median over the repetitions, and the extremes."""

    median: float
    least: float
    most: float


def interleaved(
    sides: Mapping[str, Callable[[], Any]], *, repetitions: int = 7, seconds: float = 0.05
) -> dict[str, Timing]:
    """Time callables in turn.

    Parameters
    ----------
    sides : mapping of name to callable
        Each is called once to warm up, then often enough to fill ``seconds`` per repetition.
    repetitions : int
        How often the sides take turns, at least 7 for a figure that is reported.
    seconds : float
        Time given to a side in one repetition.

    Returns
    -------
    dict of name to Timing
        Seconds per call.
    """
    calls: dict[str, int] = {}
    for name, side in sides.items():
        side()
        start = time.perf_counter()
        side()
        once = max(time.perf_counter() - start, 1e-8)
        calls[name] = max(1, int(seconds / once))
    samples: dict[str, list[float]] = {name: [] for name in sides}
    collecting = gc.isenabled()
    gc.disable()
    try:
        for _ in range(repetitions):
            for name, side in sides.items():
                count = calls[name]
                start = time.perf_counter()
                for _ in range(count):
                    side()
                samples[name].append((time.perf_counter() - start) / count)
    finally:
        if collecting:
            gc.enable()
    return {
        name: Timing(statistics.median(times), min(times), max(times))
        for name, times in samples.items()
    }


def machine() -> dict[str, str]:
    """Return what the figures were measured on."""
    import numba
    import numpy as np
    import scipy

    processor = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        for line in info.read_text().splitlines():
            if line.startswith("model name"):
                processor = line.split(":", 1)[1].strip()
                break
    return {
        "processor": processor,
        "cores": str(os.cpu_count()),
        "python": sys.version.split()[0],
        "numpy": np.__version__,
        "numba": numba.__version__,
        "scipy": scipy.__version__,
        "date": time.strftime("%Y-%m-%d"),
    }


def one_blas_thread() -> Any:
    """Return a context in which every BLAS runs on one thread."""
    from threadpoolctl import threadpool_limits

    return threadpool_limits(limits=1, user_api="blas")


def as_json(tables: Sequence[Table]) -> list[dict[str, Any]]:
    """Return tables as JSON things."""
    return [
        {"title": t.title, "columns": t.columns, "rows": t.rows, "notes": t.notes} for t in tables
    ]
