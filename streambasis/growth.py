"""The basis that grows for ever: its arrays, and how they are made larger."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.decisions import Decision, Decisions, reason_names
from streambasis.errors import SnapshotError
from streambasis.kernels import growth as kernels
from streambasis.kernels._jit import entry
from streambasis.memory import aligned_zeros
from streambasis.state import State, owned

FIRST_ROWS = 8


class Growth:
    """The arrays of a basis without a window, in Euclidean coordinates.

    Notes
    -----
    A basis of rank k holds V (k, n) row by row and the lower triangular factor L (k, k) with
    ``pivot samples = L V``, each pivot sample scaled by its own power of two. Rows are allocated
    as they are needed, at most doubling, never beyond the capacity.

    ``step(sample)`` is the kernel bound to the arrays, and is made anew whenever they are.
    """

    __slots__ = (
        "arrays",
        "directions_held",
        "factor_held",
        "integers",
        "reals",
        "step",
        "work",
    )

    def __init__(
        self, count: int, capacity: int, rtol: float, atol: float, policy: int, dtype: np.dtype[Any]
    ) -> None:
        rows = min(FIRST_ROWS, capacity)
        self.directions_held = aligned_zeros((rows, count), dtype)
        self.factor_held = np.zeros((rows, rows), dtype)
        self.integers = np.zeros(kernels.HEADER + 2 * rows, np.int64)
        self.integers[kernels.CAPACITY] = capacity
        self.integers[kernels.POLICY] = policy
        self.reals = np.array([rtol, atol, 0.0])
        self._bind()

    def _bind(self) -> None:
        rows, count = self.directions_held.shape
        dtype = self.directions_held.dtype
        self.work = aligned_zeros(count + rows, dtype)
        self.arrays = (
            self.directions_held,
            self.factor_held,
            self.work,
            self.integers,
            self.reals,
        )
        compiled = entry(kernels.push_growing, *self.arrays, np.zeros(count, dtype))
        self.step = partial(compiled, *self.arrays)

    def make_room(self) -> None:
        """Allocate more rows; everything held stays as it is."""
        rows = self.directions_held.shape[0]
        more = min(2 * rows, int(self.integers[kernels.CAPACITY]))
        count, dtype = self.directions_held.shape[1], self.directions_held.dtype
        directions = aligned_zeros((more, count), dtype)
        directions[:rows] = self.directions_held
        factor = np.zeros((more, more), directions.dtype)
        factor[:rows, :rows] = self.factor_held
        integers = np.zeros(kernels.HEADER + 2 * more, np.int64)
        integers[: kernels.HEADER + rows] = self.integers[: kernels.HEADER + rows]
        integers[kernels.HEADER + more :][:rows] = self.integers[kernels.HEADER + rows :]
        self.directions_held, self.factor_held, self.integers = directions, factor, integers
        self._bind()

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self.integers[kernels.COUNT])

    @property
    def rank(self) -> int:
        """Directions held."""
        return int(self.integers[kernels.RANK])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (rank, n), a view."""
        return self.directions_held[: self.rank]

    @property
    def factor(self) -> NDArray[Any]:
        """The lower triangular factor, (rank, rank), of the scaled pivot samples, a view."""
        return self.factor_held[: self.rank, : self.rank]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Numbers of the pivot samples, one per direction, a view."""
        return self.integers[kernels.HEADER :][: self.rank]

    @property
    def exponents(self) -> NDArray[np.int64]:
        """Exponents of two by which the pivot samples were divided, a view."""
        return self.integers[kernels.HEADER + len(self.directions_held) :][: self.rank]

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        return sum(array.nbytes for array in self.arrays)

    def stamp(self, at: Any) -> None:
        """Take note of the time of the next sample; a basis that never forgets has no use."""

    def push_block(self, samples: NDArray[Any], _at: Any = None) -> Decisions:
        """Take Euclidean samples that are known to be finite, (m, n), one after another."""
        records = []
        for sample in samples:
            record = self.step(sample)
            if record[5] == kernels.NEEDS_ROOM:
                self.make_room()
                record = self.step(sample)
            records.append(record)
        columns = list(zip(*records, strict=True)) or [()] * len(Decision._fields)
        kinds = [np.int64, float, float, float, bool, *[np.int64] * 5]
        out = [np.array(c, k) for c, k in zip(columns, kinds, strict=True)]
        out[5] = reason_names(out[5])
        return Decisions(*out)

    def to_state(self) -> State:
        """Hand over the arrays as far as they are in use."""
        return State(
            "Growth",
            arrays={
                "vectors": owned(self.directions),
                "factor": owned(self.factor),
                "pivots": owned(self.pivots),
                "exponents": owned(self.exponents),
                "header": owned(self.integers[: kernels.HEADER]),
                "reals": owned(self.reals),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over the arrays of a state made with the same channels and dtype.

        Raises
        ------
        SnapshotError
            If they do not fit each other.
        """
        dtype, channels = self.directions_held.dtype, self.directions_held.shape[1]
        header = state.take("header", np.int64, (kernels.HEADER,))
        k = int(header[kernels.RANK])
        vectors = state.take("vectors", dtype, (k, channels))
        factor = state.take("factor", dtype, (k, k))
        pivots = state.take("pivots", np.int64, (k,))
        exponents = state.take("exponents", np.int64, (k,))
        reals = state.take("reals", np.float64, self.reals.shape, finite=True)
        if not k <= header[kernels.CAPACITY] <= channels or not k <= header[kernels.COUNT]:
            raise SnapshotError(
                f"{k} directions of {header[kernels.COUNT]} samples on {channels} channels, where "
                f"at most {header[kernels.CAPACITY]} are kept"
            )
        if k:
            # without a spare row: until it grows, a large basis stays the page of the file that
            # it was read from
            self.directions_held, self.factor_held = vectors, factor
            self.integers = np.concatenate([header, pivots, exponents])
        else:
            self.integers[: kernels.HEADER] = header
        self.reals = reals
        self._bind()
