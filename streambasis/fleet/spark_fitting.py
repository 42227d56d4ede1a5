"""What a worker of Spark does with history: bases from Arrow batches, and merging them.

Nothing here imports Spark, which hands the functions over and calls them in its workers.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from streambasis.compare import merge
from streambasis.errors import SettingError, StreambasisError
from streambasis.monitor import NoveltyMonitor
from streambasis.principal import PrincipalBasis
from streambasis.snapshot import from_bytes, to_bytes

if TYPE_CHECKING:
    import pyarrow as pa

Batches = Iterator["pa.RecordBatch"]

FITTED = "key string, snapshot binary, rank int, count bigint"
PARTIAL = "part int, snapshot binary"
"""What comes out, as Spark writes a schema."""

KINDS = ("PrincipalBasis", "StreamBasis", "NoveltyMonitor")


@dataclass(frozen=True)
class Fit:
    """What is fitted.

    Attributes
    ----------
    kind : str
        One of ``KINDS``.
    channels : tuple of str
        Names of the channels.
    settings : dict
        The keywords of that class.
    """

    kind: str
    channels: tuple[str, ...]
    settings: dict[str, Any]

    def make(self) -> Any:
        """Return an object that has seen nothing.

        Raises
        ------
        SettingError
            If kind or settings are refused.
        """
        if self.kind not in KINDS:
            raise SettingError(f"kind={self.kind!r}: one of {', '.join(KINDS)}")
        try:
            return getattr(importlib.import_module("streambasis"), self.kind)(
                self.channels, **self.settings
            )
        except TypeError as error:
            raise SettingError(f"{self.kind}: {error}") from None

    @staticmethod
    def take(basis: Any, samples: NDArray[np.float64]) -> None:
        """Have an object take samples."""
        if isinstance(basis, PrincipalBasis):
            basis.take_many(samples)
        else:
            basis.push_many(samples)


def samples_of(batch: pa.RecordBatch, channels: int) -> NDArray[np.float64]:
    """Return the column ``values`` as an array, (m, channels), NaN where a value is missing."""
    flat = batch.column("values").flatten().to_numpy(zero_copy_only=False)
    return np.ascontiguousarray(flat, np.float64).reshape(len(batch), channels)


def fitted_by_key(fit: Fit) -> Callable[[Batches], Batches]:
    """Return the function that fits one object for each run of equal keys.

    Notes
    -----
    Rows come in the order of their keys, so one object is held at a time, whatever the length of
    its history.
    """

    def run(batches: Batches) -> Batches:
        key, basis = None, None
        for batch in batches:
            samples = samples_of(batch, len(fit.channels))
            keys = np.array(batch.column("key").to_pylist(), object)
            starts = [0, *(np.flatnonzero(keys[1:] != keys[:-1]) + 1)] if len(keys) else []
            for start, stop in zip(starts, [*starts[1:], len(keys)], strict=True):
                if keys[start] != key:
                    if key is not None:
                        yield _fitted(key, basis)
                    key, basis = keys[start], fit.make()
                try:
                    fit.take(basis, samples[start:stop])
                except StreambasisError as error:
                    raise type(error)(f"key {key!r}: {error}") from None
        if key is not None:
            yield _fitted(key, basis)

    return run


def _fitted(key: str, basis: Any) -> pa.RecordBatch:
    import pyarrow as pa

    if not isinstance(basis, NoveltyMonitor):
        flush(basis)
    columns = {
        "key": pa.array([key], pa.string()),
        "snapshot": pa.array([to_bytes(basis)], pa.binary()),
        "rank": pa.array([basis.rank], pa.int32()),
        "count": pa.array([basis.count], pa.int64()),
    }
    return pa.RecordBatch.from_pydict(columns)


def flush(basis: Any) -> None:
    """Fold what waits for its block to fill: the history has ended."""
    if isinstance(basis, PrincipalBasis):
        basis.flush()


def fitted_by_partition(fit: Fit) -> Callable[[Batches], Batches]:
    """Return the function that fits one basis on a partition, which it names by its number."""

    def run(batches: Batches) -> Batches:
        part, basis = -1, fit.make()
        for batch in batches:
            if len(batch):
                part = batch.column("part")[0].as_py()
                fit.take(basis, samples_of(batch, len(fit.channels)))
        if part >= 0:
            yield _partial(part, basis)

    return run


def merged(table: pa.Table) -> pa.Table:
    """Return the one basis of several, in the order of their partitions."""
    import pyarrow as pa

    rows = table.sort_by("part")
    first = rows.column("part")[0].as_py()
    return pa.Table.from_batches([_partial(first, merge_all(rows.column("snapshot").to_pylist()))])


def merge_all(snapshots: list[bytes]) -> Any:
    """Return the basis of the snapshots of its parts, in order, at least one."""
    bases = [from_bytes(snapshot) for snapshot in snapshots]
    return merge(*bases) if len(bases) > 1 else bases[0]


def _partial(part: int, basis: Any) -> pa.RecordBatch:
    import pyarrow as pa

    columns = {
        "part": pa.array([part], pa.int32()),
        "snapshot": pa.array([to_bytes(basis)], pa.binary()),
    }
    return pa.RecordBatch.from_pydict(columns)
