"""Decisions that a run has kept: in files, and in the snapshot of a run that goes on."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.errors import RecordError
from streambasis.report.thinning import NO_TIME
from streambasis.state import State

SERIES = ("spe", "t2", "limit", "t2_limit", "rank")
NEEDED = ("sample", "time", *SERIES, "novel", "extreme", "event")
ARROW, PARQUET = ".arrow", ".parquet"


@dataclass(frozen=True, slots=True)
class Decisions:
    """Consecutive decisions as arrays; NaN, ``NO_TIME`` and -1 for null."""

    samples: NDArray[np.int64]
    times: NDArray[np.int64]
    series: dict[str, NDArray[np.float64]]
    novel: NDArray[np.bool_]
    extreme: NDArray[np.bool_]
    events: NDArray[np.int64]

    def after(self, last: int) -> Decisions:
        """Return those of samples after one."""
        rows = self.samples > last
        return Decisions(
            self.samples[rows],
            self.times[rows],
            {name: values[rows] for name, values in self.series.items()},
            self.novel[rows],
            self.extreme[rows],
            self.events[rows],
        )


def _decisions(segment: Path, batch: pa.RecordBatch) -> Decisions:
    columns = {name: _column(segment, batch, name) for name in NEEDED}

    def numbers(name: str, kind: pa.DataType, null: Any = None) -> NDArray[Any]:
        column = columns[name].cast(kind)
        filled = column if null is None else column.fill_null(null)
        return np.asarray(filled.to_numpy(zero_copy_only=False))

    try:
        columns["time"] = columns["time"].cast(pa.timestamp("ns"))
        return Decisions(
            numbers("sample", pa.int64()),
            numbers("time", pa.int64(), int(NO_TIME)),
            {name: numbers(name, pa.float64()) for name in SERIES},
            numbers("novel", pa.bool_(), False),
            numbers("extreme", pa.bool_(), False),
            numbers("event", pa.int64(), -1),
        )
    except pa.ArrowException as error:
        raise RecordError(f"{segment}: a column of the wrong kind ({error})") from None


def segments_of(home: Path) -> list[Path]:
    """Return the files of decisions in a folder, in order.

    Raises
    ------
    RecordError
        If the folder holds no run.
    """
    if not home.exists():
        raise RecordError(f"{home}: no such folder; give the one that watch --home wrote")
    if not home.is_dir():
        raise RecordError(f"{home}: not a folder; give the one that watch --home wrote")
    if (home / "fleet.arrow").exists():
        raise RecordError(
            f"{home}: holds many feeds (--key), and pictures are of one; watch that by itself"
        )
    folder = home / "decisions"
    if not folder.is_dir():
        raise RecordError(
            f"{home}: holds no run (no decisions/ in it); give the folder that watch --home wrote"
        )
    try:
        found = [path for path in folder.iterdir() if path.suffix in (ARROW, PARQUET)]
    except OSError as error:
        raise RecordError(f"{folder}: cannot be read ({error.strerror or error})") from None
    return sorted(path for path in found if not path.name.startswith("."))


def _batches(segment: Path, rows: slice | None = None) -> Iterator[pa.RecordBatch]:
    """Yield the record batches of a segment, or those that a slice of their list picks."""
    try:
        with pa.OSFile(str(segment)) as source:
            if segment.suffix == PARQUET:
                import pyarrow.parquet as pq

                groups = pq.ParquetFile(source)
                for group in range(groups.num_row_groups)[rows or slice(None)]:
                    yield from groups.read_row_group(group).to_batches()
            else:
                file = pa.ipc.open_file(source)
                for number in range(file.num_record_batches)[rows or slice(None)]:
                    yield file.get_batch(number)
    except (OSError, pa.ArrowException) as error:
        detail = str(error).splitlines()[0]
        raise RecordError(f"{segment}: cannot be read as decisions ({detail})") from None


def decisions_of(segment: Path) -> Iterator[Decisions]:
    """Yield the decisions of a file, one record batch at a time."""
    for batch in _batches(segment):
        if len(batch):
            yield _decisions(segment, batch)


def end_of(segment: Path, which: int) -> int:
    """Return the number of the first (0) or last (-1) sample of a segment."""
    picked = slice(0, 1) if which == 0 else slice(-1, None)
    for batch in list(_batches(segment, picked))[which:]:
        numbers = _column(segment, batch, "sample")
        if len(numbers) and pa.types.is_integer(numbers.type):
            return int(numbers[which].as_py())
    raise RecordError(f"{segment}: holds no numbered decisions")


def _column(segment: Path, batch: pa.RecordBatch, name: str) -> pa.Array:
    if name not in batch.schema.names:
        raise RecordError(f"{segment}: no column {name!r}; these are not decisions")
    return batch.column(name)


def waiting(snapshot: State | None) -> Decisions | None:
    """Return the decisions that a run that goes on keeps in its snapshot until they fill a file."""
    part = None if snapshot is None else find(snapshot, "Segment")
    if part is None or not len(part.arrays["sample"]):
        return None
    held = part.arrays
    return Decisions(
        held["sample"],
        held["time"],
        {name: held[name].astype(np.float64) for name in SERIES},
        held["novel"],
        held["extreme"],
        held["event"],
    )


def find(state: State, kind: str) -> State | None:
    """Return the first state of a kind, this one or one of its parts."""
    if state.kind == kind:
        return state
    found = (find(part, kind) for part in state.parts.values())
    return next((part for part in found if part is not None), None)
