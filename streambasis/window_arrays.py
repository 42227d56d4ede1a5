"""The arrays of a basis over a window: what is in them, and how they are made larger."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.basis_settings import Settings
from streambasis.errors import SnapshotError
from streambasis.kernels import exchange, growth
from streambasis.kernels import window as kernels
from streambasis.kernels._jit import entry
from streambasis.memory import aligned_zeros, mapped_zeros
from streambasis.state import State, owned
from streambasis.times import EARLIEST

FIRST_ROWS = 8
FIRST_SLOTS = 64


class WindowArrays:
    """The arrays of a basis over a window, in Euclidean coordinates.

    Parameters
    ----------
    count : int
        Channels.
    settings : Settings
        What was asked for.
    dtype : numpy.dtype
        One of the four.

    Notes
    -----
    Memory: V (k, n), the coordinates of every sample in the window (W, k), the factorized block of
    the pivot samples (2, k, k), and 88 bytes a sample. Rows and slots are allocated as they are
    needed, at most doubling, up to the capacity and the window; they are not given back. Without
    ``window`` they grow to what the span holds. Samples that the capacity leaves uncovered are
    kept in full, n values each, because their place in the basis cannot be had otherwise.
    """

    __slots__ = (
        "_coordinates",
        "_directions",
        "_integers",
        "_members",
        "_pool",
        "_reals",
        "_scratch",
        "_sizes",
        "_small",
        "_span",
        "arrays",
        "step",
        "timed",
    )

    def __init__(self, count: int, settings: Settings, dtype: np.dtype[Any]) -> None:
        self.timed = settings.span is not None
        self._span = settings.span
        window = settings.window or 0
        rows, slots = min(FIRST_ROWS, settings.capacity), min(FIRST_SLOTS, window or FIRST_SLOTS)
        integers = np.zeros(exchange.HEADER + rows, np.int64)
        integers[growth.CAPACITY] = settings.capacity
        integers[growth.POLICY] = settings.policy
        integers[exchange.WINDOW] = window
        integers[[exchange.OLDEST, exchange.NEWEST, exchange.FREE]] = exchange.NONE
        integers[exchange.HORIZON] = EARLIEST - 1
        self._integers = integers
        self._reals = np.array([settings.rtol, settings.atol, 0.0])
        self._scratch = aligned_zeros((2, count), dtype)
        self._directions = aligned_zeros((rows, count), dtype)
        self._small = aligned_zeros((2 * rows + exchange.WORK, rows), dtype)
        self._coordinates = aligned_zeros((slots, rows), dtype)
        self._members = np.zeros((slots, exchange.MEMBER), np.int64)
        self._sizes = np.zeros((slots, 3))
        self._pool = aligned_zeros((0, count), dtype)
        self._bind()

    def _bind(self) -> None:
        self.arrays = (
            self._scratch,
            self._small,
            self._directions,
            self._coordinates,
            self._members,
            self._sizes,
            self._pool,
            self._integers,
            self._reals,
        )
        sample = self._scratch[exchange.RESIDUAL]
        self.step = partial(entry(kernels.push_window, *self.arrays, sample), *self.arrays)

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self._integers[growth.COUNT])

    @property
    def rank(self) -> int:
        """Directions held."""
        return int(self._integers[growth.RANK])

    @property
    def capacity(self) -> int:
        """Most directions kept."""
        return int(self._integers[growth.CAPACITY])

    @property
    def version(self) -> tuple[int, int, int]:
        """What changes when a direction changes."""
        return self.rank, self.renewals, int(self._integers[exchange.WEAR])

    @property
    def uncovered(self) -> int:
        """Samples in the window that the capacity leaves uncovered."""
        return int(self._integers[growth.UNCOVERED])

    @property
    def live(self) -> int:
        """Samples in the window."""
        return int(self._integers[exchange.LIVE])

    @property
    def renewals(self) -> int:
        """How often the directions were re-orthonormalized."""
        return int(self._integers[growth.RENEWALS])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (rank, n), a view."""
        return self._directions[: self.rank]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Numbers of the pivot samples, one per direction."""
        numbers: NDArray[np.int64] = self._members[self._holders, exchange.ID]
        return numbers

    @property
    def _holders(self) -> NDArray[np.int64]:
        return self._integers[exchange.HEADER :][: self.rank]

    @property
    def _owners(self) -> NDArray[np.int64]:
        owners = self._integers[exchange.HEADER + len(self._directions) :]
        return owners[: self._integers[growth.UNCOVERED]]

    @property
    def _block(self) -> tuple[NDArray[Any], NDArray[Any]]:
        k, rows = self.rank, len(self._directions)
        return self._small[:k, :k], self._small[rows : rows + k, :k]

    @property
    def members(self) -> NDArray[np.int64]:
        """Numbers of the samples in the window, oldest first."""
        numbers = self._members[: self._integers[exchange.TOP], exchange.ID]
        return np.sort(numbers[numbers != exchange.NONE])

    @property
    def waiting(self) -> NDArray[np.int64]:
        """Numbers of the samples that the capacity leaves uncovered, oldest first."""
        return np.sort(self._members[self._owners, exchange.ID])

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        return sum(array.nbytes for array in self.arrays)

    def allot(self, wanted: int) -> None:
        """Allocate more of what a kernel ran out of: SLOTS, ROWS or POOL."""
        if wanted == exchange.SLOTS:
            window = int(self._integers[exchange.WINDOW])
            slots = 2 * len(self._members)
            self._allot_slots(min(slots, window) if window else slots)
        elif wanted == exchange.ROWS:
            self._allot_rows(min(2 * len(self._directions), self.capacity))
        else:
            self._allot_copies(max(2 * len(self._pool), FIRST_ROWS))

    def _allot_rows(self, rows: int) -> None:
        slots, count = len(self._members), self._directions.shape[1]
        held = len(self._directions)
        small = aligned_zeros((2 * rows + exchange.WORK, rows), self._small.dtype)
        small[:held, :held] = self._small[:held]
        small[rows : rows + held, :held] = self._small[held : 2 * held]
        integers = np.zeros(len(self._integers) + rows - held, np.int64)
        integers[: exchange.HEADER + held] = self._integers[: exchange.HEADER + held]
        integers[exchange.HEADER + rows :] = self._integers[exchange.HEADER + held :]
        directions = _enlarged(self._directions, (rows, count))
        self._coordinates = _enlarged(self._coordinates, (slots, rows))
        self._directions, self._small, self._integers = directions, small, integers
        self._bind()

    def _allot_slots(self, slots: int) -> None:
        coordinates = _enlarged(self._coordinates, (slots, self._coordinates.shape[1]))
        members = _enlarged(self._members, (slots, exchange.MEMBER))
        self._sizes = _enlarged(self._sizes, (slots, 3))
        self._coordinates, self._members = coordinates, members
        self._bind()

    def _allot_copies(self, copies: int) -> None:
        end = exchange.HEADER + len(self._directions)
        integers = _enlarged(self._integers, (end + copies,))
        self._pool = _enlarged(self._pool, (copies, self._directions.shape[1]))
        self._integers = integers
        self._bind()

    def to_state(self) -> State:
        """Hand over the arrays as far as they are in use."""
        k, top = self.rank, int(self._integers[exchange.TOP])
        q, r = self._block
        chain = _chain(self._members[:top])
        stamped = chain if self._integers[exchange.STAMPED] else chain[:0]
        return State(
            "Window",
            arrays={
                "vectors": owned(self.directions),
                # these three are for readers of a snapshot; they follow from the others
                "pivots": self.pivots,
                "samples": self._members[chain, exchange.ID],
                "times": self._members[stamped, exchange.TIME],
                "orthogonal": owned(q),
                "triangular": owned(r),
                "holders": owned(self._holders),
                "coordinates": owned(self._coordinates[:top, :k]),
                "members": owned(self._members[:top]),
                "sizes": owned(self._sizes[:top]),
                "uncovered": owned(self._pool[: len(self._owners)]),
                "owners": owned(self._owners),
                "header": owned(self._integers[: exchange.KEPT]),
                "reals": owned(self._reals),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over the arrays of a state made with the same channels and dtype.

        Raises
        ------
        SnapshotError
            If they do not fit each other.
        """
        dtype, channels = self._directions.dtype, self._directions.shape[1]
        header = state.take("header", np.int64, (exchange.KEPT,))
        k, top, uncovered = (int(header[i]) for i in (growth.RANK, exchange.TOP, growth.UNCOVERED))
        vectors = state.take("vectors", dtype, (k, channels))
        orthogonal = state.take("orthogonal", dtype, (k, k))
        triangular = state.take("triangular", dtype, (k, k))
        holders = state.take("holders", np.int64, (k,))
        coordinates = state.take("coordinates", dtype, (top, k))
        members = state.take("members", np.int64, (top, exchange.MEMBER))
        sizes = state.take("sizes", np.float64, (top, 3))
        pool = state.take("uncovered", dtype, (uncovered, channels))
        owners = state.take("owners", np.int64, (uncovered,))
        state.take("pivots", np.int64, (k,))
        live = len(state.take("samples", np.int64, (int(header[exchange.LIVE]),)))
        state.take("times", np.int64, (live if header[exchange.STAMPED] else 0,))
        reals = state.take("reals", np.float64, self._reals.shape, finite=True)
        slots = [header[[exchange.OLDEST, exchange.NEWEST, exchange.FREE]], holders, owners]
        slots += [members[:, exchange.OLDER], members[:, exchange.NEWER]]
        places = members[:, exchange.PLACE]
        if (
            any(((each < exchange.NONE) | (each >= top)).any() for each in slots)
            or ((places < exchange.NONE) | (places >= uncovered)).any()
            or not k <= header[growth.CAPACITY] <= channels
            or (members[:, exchange.ID] >= header[growth.COUNT]).any()
            or not _linked(header, members)
        ):
            raise SnapshotError(
                f"a window of {header[exchange.LIVE]} samples on {channels} channels, {k} "
                "directions: its parts do not fit each other"
            )
        self._integers[: exchange.KEPT] = header
        self._reals = reals
        self.timed = self._span is not None or bool(header[exchange.STAMPED])
        # an uncovered sample means that the rows have once reached the capacity
        rows = int(header[growth.CAPACITY]) if uncovered else k
        self._allot_rows(max(rows, len(self._directions)))
        self._allot_slots(max(top, len(self._members)))
        self._allot_copies(uncovered)
        q, r = self._block
        self.directions[:], q[:], r[:] = vectors, orthogonal, triangular
        self._holders[:], self._owners[:] = holders, owners
        self._coordinates[:top, :k] = coordinates
        self._members[:top], self._sizes[:top] = members, sizes
        self._pool[:] = pool


def _chain(members: NDArray[np.int64]) -> NDArray[np.intp]:
    """Return the slots in use, oldest sample first."""
    used = np.flatnonzero(members[:, exchange.ID] != exchange.NONE)
    return used[np.argsort(members[used, exchange.ID], kind="stable")]


def _linked(header: NDArray[np.int64], members: NDArray[np.int64]) -> bool:
    """Return whether the links lead from the oldest to the newest sample, and over free slots."""
    chain = _chain(members)
    free = np.flatnonzero(members[:, exchange.ID] == exchange.NONE)
    around = np.pad(chain, 1, constant_values=exchange.NONE)
    # each free slot is led to by exactly one other or by the header, the last one leads nowhere
    leads = np.concatenate([header[[exchange.FREE]], members[free, exchange.NEWER]])
    return bool(
        header[exchange.LIVE] == len(chain)
        and header[exchange.OLDEST] == around[1]
        and header[exchange.NEWEST] == around[-2]
        and (members[chain, exchange.OLDER] == around[:-2]).all()
        and (members[chain, exchange.NEWER] == around[2:]).all()
        and (np.sort(leads) == np.concatenate([[exchange.NONE], free])).all()
    )


def _enlarged(array: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
    out = mapped_zeros(shape, array.dtype)
    out[tuple(slice(extent) for extent in array.shape)] = array
    return out
