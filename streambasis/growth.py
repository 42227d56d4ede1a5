"""The basis that grows for ever: its arrays, and how they are made larger."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.kernels import growth as kernels
from streambasis.state import State, owned

FIRST_ROWS = 8


class Growth:
    """The arrays of a basis without a window, in Euclidean coordinates.

    Notes
    -----
    A basis of rank k holds V (k, n) row by row and the lower triangular factor L (k, k) with
    ``pivot samples = L V``, each pivot sample scaled by its own power of two. Rows are allocated
    as they are needed, at most doubling, never beyond the capacity.
    """

    __slots__ = (
        "arrays",
        "directions_held",
        "exponents",
        "factor",
        "header",
        "pivots_held",
        "reals",
        "sample",
    )

    kernel = staticmethod(kernels.push_growing)

    def __init__(
        self, count: int, capacity: int, rtol: float, atol: float, policy: int, dtype: np.dtype[Any]
    ) -> None:
        rows = min(FIRST_ROWS, capacity)
        self.sample = np.zeros(count, dtype)
        self.directions_held = np.zeros((rows, count), dtype)
        self.factor = np.zeros((rows, rows), dtype)
        self.pivots_held = np.zeros(rows, np.int64)
        self.exponents = np.zeros(rows, np.int64)
        self.header = np.zeros(kernels.HEADER, np.int64)
        self.header[kernels.CAPACITY] = capacity
        self.header[kernels.POLICY] = policy
        self.reals = np.array([rtol, atol])
        self._bind()

    def _bind(self) -> None:
        rows, count = self.directions_held.shape
        dtype = self.sample.dtype
        self.arrays = (
            self.sample,
            np.zeros(count, dtype),
            np.zeros(rows, dtype),
            self.directions_held,
            self.factor,
            self.pivots_held,
            self.exponents,
            self.header,
            self.reals,
        )

    def make_room(self) -> None:
        """Allocate more rows; everything held stays as it is."""
        rows = self.directions_held.shape[0]
        more = min(2 * rows, int(self.header[kernels.CAPACITY]))
        directions = np.zeros((more, self.sample.shape[0]), self.sample.dtype)
        directions[:rows] = self.directions_held
        factor = np.zeros((more, more), self.sample.dtype)
        factor[:rows, :rows] = self.factor
        self.directions_held, self.factor = directions, factor
        self.pivots_held = np.concatenate([self.pivots_held, np.zeros(more - rows, np.int64)])
        self.exponents = np.concatenate([self.exponents, np.zeros(more - rows, np.int64)])
        self._bind()

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self.header[kernels.COUNT])

    @property
    def rank(self) -> int:
        """Directions held."""
        return int(self.header[kernels.RANK])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (rank, n), a view."""
        return self.directions_held[: self.rank]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Numbers of the pivot samples, one per direction."""
        return self.pivots_held[: self.rank].copy()

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        return sum(array.nbytes for array in self.arrays)

    def to_state(self) -> State:
        """Hand over the arrays as far as they are in use."""
        k = self.rank
        return State(
            "Growth",
            arrays={
                "vectors": owned(self.directions),
                "factor": owned(self.factor[:k, :k]),
                "pivots": self.pivots,
                "exponents": owned(self.exponents[:k]),
                "header": owned(self.header),
                "reals": owned(self.reals),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over the arrays of a state made with the same channels and dtype."""
        arrays = state.arrays
        k = arrays["vectors"].shape[0]
        self.header[:] = arrays["header"]
        self.reals[:] = arrays["reals"]
        while self.directions_held.shape[0] < k:
            self.make_room()
        self.directions_held[:k] = arrays["vectors"]
        self.factor[:k, :k] = arrays["factor"]
        self.pivots_held[:k] = arrays["pivots"]
        self.exponents[:k] = arrays["exponents"]
