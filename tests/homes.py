"""Folders as ``streambasis watch --home`` leaves them, made up at any size without a run."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from streambasis import save
from streambasis.monitor.events import Event, History
from streambasis.state import State
from streambasis.watch.progress import ENERGIES

START = 1_772_409_600 * 10**9
"""2026-03-02, in nanoseconds."""

SEGMENT = 1 << 16


def names_of(channels: int) -> list[str]:
    """Return names of an invented mill: the kind of quantity, its place, its unit."""
    kinds = ("bearing temperature", "vibration", "motor current", "flow", "pressure", "speed")
    units = ("°C", "mm/s", "A", "m³/h", "bar", "rpm")
    return [f"{kinds[i % 6]} {i // 6 + 1} ({units[i % 6]})" for i in range(channels)]


def spans_of(samples: int, baseline: int, events: int, rng: np.random.Generator) -> np.ndarray:
    """Return first and last sample of events spread over the run, none touching another."""
    if events == 0:
        return np.zeros((0, 2), np.int64)
    edges = np.linspace(baseline, samples, events + 1).astype(np.int64)
    room = np.diff(edges)
    starts = edges[:-1] + (room * rng.uniform(0.1, 0.6, events)).astype(np.int64)
    lengths = np.maximum((room * rng.uniform(0.02, 0.3, events)).astype(np.int64), 1)
    return np.stack([starts, starts + lengths - 1], axis=1)


def shares_of(directions: np.ndarray) -> np.ndarray:
    """Return the share of each channel in each direction."""
    squares = directions**2
    squares[squares < 0.01 * squares.max(axis=1, keepdims=True)] = 0.0
    return squares / squares.sum(axis=1, keepdims=True)


def make_home(
    path: Path,
    samples: int,
    channels: int,
    events: int,
    *,
    baseline: int | None = None,
    names: list[str] | None = None,
    step: int | None = 10**9,
    rank: int = 4,
    label: str | None = None,
    progress: bool = True,
    snapshot: bool = True,
    seed: int = 1,
) -> Path:
    """Write a run that never was: chi-squared scores, limits, events with directions, readings.

    ``step`` is the time between two samples in nanoseconds; None leaves the times out.
    """
    rng = np.random.default_rng(seed)
    names = names_of(channels) if names is None else names
    baseline = samples // 10 if baseline is None else baseline
    free = max(channels - rank, 2)
    spans = spans_of(samples, baseline, events, rng)
    peaks = 10 ** rng.uniform(0.15, 1.6, events)
    patterns = np.zeros((max(events, 1), channels))
    for row in patterns:
        picked = rng.choice(channels, min(3, channels), replace=False)
        row[picked] = rng.normal(size=len(picked)) + np.sign(rng.normal(size=len(picked)))
    repeats = {i: i // 3 for i in range(5, events, 4)}
    for i, earlier in repeats.items():
        patterns[i] = patterns[earlier] + 0.05 * rng.normal(size=channels)
    directions = patterns / np.maximum(np.linalg.norm(patterns, axis=1, keepdims=True), 1e-9)
    (path / "decisions").mkdir(parents=True)
    limit = free + 4.5 * np.sqrt(2 * free)
    for first in range(0, samples, SEGMENT):
        number = np.arange(first, min(first + SEGMENT, samples))
        spe, t2 = (
            rng.chisquare(free, len(number)),
            rng.chisquare(max(rank, 1), len(number)) * (rank > 0),
        )
        event = np.full(len(number), -1)
        for i, (start, end) in enumerate(spans):
            inside = (number >= start) & (number <= end)
            event[inside] = i
            spe[inside] *= 1.0 + (limit / free) * (peaks[i] - 1.0) * rng.uniform(
                0.5, 1.0, int(inside.sum())
            )
        young = number < baseline
        null = {name: pa.array(x, mask=young) for name, x in (("spe", spe), ("t2", t2))}
        limits = {
            name: pa.array(np.full(len(number), x), mask=young)
            for name, x in (("limit", limit), ("t2_limit", 26.0))
        }
        time = pa.array(
            (START + number * (step or 0)).view("datetime64[ns]"),
            pa.timestamp("ns"),
            mask=np.full(len(number), step is None),
        )
        table = pa.table(
            {
                "sample": number,
                "time": time,
                **null,
                **limits,
                "novel": (spe > limit) & ~young,
                "extreme": (t2 > 26.0) & ~young,
                "rank": np.where(young, 0, rank).astype(np.int32),
                "event": pa.array(event, mask=event < 0),
            }
        )
        with pa.ipc.new_file(path / "decisions" / f"{first:012d}.arrow", table.schema) as file:
            file.write_table(table)

    history = History(channels, 0.8)
    shares = shares_of(directions)
    with (path / "events.jsonl").open("w", encoding="utf-8") as lines:
        for i, (start, end) in enumerate(spans.tolist()):
            order = np.argsort(-shares[i], kind="stable")
            leading = int(np.searchsorted(np.cumsum(shares[i][order]), 0.9)) + 1
            earlier = repeats.get(i)
            moments = [
                None if step is None else str(np.datetime64(START + s * step, "ns"))
                for s in (start, end)
            ]
            fields: dict[str, Any] = {
                "event": i,
                "start": start,
                "end": end,
                "start_time": moments[0],
                "end_time": moments[1],
                "peak": float(peaks[i]),
                "channels": [names[k] for k in order[:leading]],
                "contributions": {names[k]: float(shares[i][k]) for k in order},
                "repeats": earlier,
                "cosine": None
                if earlier is None
                else float(abs(directions[i] @ directions[earlier])),
                "label": label,
            }
            lines.write(json.dumps(fields, ensure_ascii=False) + "\n")
            history.events[i] = Event(fields, directions[i : i + 1], open=False)
    history._directions = directions[:events]
    if progress:
        write_progress(path, samples, baseline, names, rank, rng)
    if snapshot:
        settings = {"false_alarm": 1e-4, "limits": "tail", "half_life": None, "opens": 4,
                    "window": 8, "quiet": 100, "same": 0.8}  # fmt: skip
        facts = {"channels": names, "baseline": baseline, "settings": settings}
        judge = State("Judge", {}, {}, {"history": history.to_state()})
        save(State("NoveltyMonitor", facts, {}, {"core": judge}), path / "state.arrow")
    return path


def write_progress(
    path: Path, samples: int, baseline: int, names: list[str], rank: int, rng: np.random.Generator
) -> None:
    """Write readings of a basis that drifts slowly and learns one behaviour half-way."""
    rows = max(min(2000, samples // 1024), 2)
    at = np.linspace(baseline, samples - 1, rows).astype(np.int64)
    energies = np.full((rows, ENERGIES), np.nan)
    levels = np.array([80.0, 30.0, 27.0, 9.0])[:rank]
    energies[:, :rank] = levels * np.exp(np.cumsum(0.3 / rows * rng.normal(size=(rows, rank)), 0))
    table = pa.table(
        {
            "sample": at,
            "noise": 1.0 + 0.03 * np.linspace(0, 1, rows) + 0.002 * rng.normal(size=rows),
            "drift": 0.2 * np.linspace(0, 1, rows) ** 2,
            "known": (at > samples // 2).astype(np.int32),
            "energies": pa.FixedSizeListArray.from_arrays(energies.ravel(), ENERGIES),
        }
    )
    about = {"feed": "mill.parquet", "channels": names, "clock": "timestamps", "adopt_after": 1000}
    table = table.replace_schema_metadata({"about": json.dumps(about)})
    with pa.ipc.new_file(path / "progress.arrow", table.schema) as file:
        file.write_table(table)
