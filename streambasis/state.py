"""The plain state that objects hand over and take back.

A state is data alone: scalars, text, arrays and the states of parts. Objects build one and are
built from one; :mod:`streambasis.snapshot` writes one to an Arrow file. Neither knows the other.
"""

from __future__ import annotations

import threading
from abc import ABC, abstractmethod
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field
from typing import Any, Protocol, Self, runtime_checkable

import numpy as np
from numpy.typing import DTypeLike, NDArray

from streambasis.errors import SnapshotError
from streambasis.memory import aligned_zeros

LARGE = 1 << 20
"""Bytes from which an array that a file gave is used where it lies. The rows of a smaller one fit
the processor's caches, where it counts that they start at a cache line."""


@dataclass(slots=True)
class State:
    """Everything an object needs to go on as if it had never stopped.

    Attributes
    ----------
    kind : str
        Which object this is the state of, such as ``"StreamBasis"``. A kind never changes meaning.
    facts : dict
        Scalars, text, None, and lists or dicts of these: whatever JSON holds exactly. Integers
        beyond 2**53 and floats (by ``repr``) survive.
    arrays : dict of str to ndarray
        Arrays of at most two dimensions; float32, float64, complex64, complex128, int64, int32
        or bool.
        By convention ``vectors`` holds directions: orthonormal rows, in the Euclidean coordinates
        behind the inner product. A snapshot that is loaded is refused where they are not.
    parts : dict of str to State
        The states of the objects that this one owns.
    given : bool
        Whether the arrays belong to whoever takes them (:meth:`take`).
    """

    kind: str
    facts: dict[str, Any] = field(default_factory=dict)
    arrays: dict[str, NDArray[Any]] = field(default_factory=dict)
    parts: dict[str, State] = field(default_factory=dict)
    given: bool = False

    def take(
        self,
        name: str,
        dtype: DTypeLike | None = None,
        shape: tuple[int | None, ...] | None = None,
        *,
        finite: bool = False,
    ) -> NDArray[Any]:
        """Return an array that nobody else writes to: C-contiguous, writable, aligned.

        Parameters
        ----------
        name : str
            Name of the array.
        dtype : dtype, optional
            What its type must be.
        shape : tuple, optional
            What its shape must be; None for a length that may be any.
        finite : bool
            Whether infinities and NaN are refused. Directions are left to the check of snapshots,
            which is spared where one has just written the file oneself.

        Raises
        ------
        SnapshotError
            If there is no such array, it is of another type or shape or, where that is asked for,
            not finite.

        Notes
        -----
        The state that a snapshot file was read into gives its arrays away as they are: they are
        private pages of the file, copied by the system when and where they are first written to,
        so a large object is there at once. A small array, and any of another state, is copied to
        the start of a cache line.
        """
        if name not in self.arrays:
            raise SnapshotError(f"a state of {self.kind} without its array {name!r}")
        array = self.arrays[name]
        if dtype is not None and array.dtype != dtype:
            raise SnapshotError(f"{name!r} of {self.kind} is {array.dtype}, not {np.dtype(dtype)}")
        if shape is not None and (
            array.ndim != len(shape)
            or any(
                length not in (None, has) for has, length in zip(array.shape, shape, strict=True)
            )
        ):
            expected = ", ".join("any" if length is None else str(length) for length in shape)
            raise SnapshotError(f"{name!r} of {self.kind} is {array.shape}, not ({expected})")
        if finite and not np.isfinite(array).all():
            raise SnapshotError(f"{name!r} of {self.kind} is not finite")
        flags = array.flags
        large = array.nbytes >= LARGE and flags.c_contiguous and flags.writeable and flags.aligned
        if self.given and large:
            return array
        out = aligned_zeros(array.shape, array.dtype)
        out[...] = array
        return out


@runtime_checkable
class Stateful(Protocol):
    """An object that can hand over its state and be built from it."""

    def to_state(self) -> State:
        """Return a state that shares no memory that later updates change."""
        ...

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build an object that goes on exactly where ``state`` was taken."""
        ...


@runtime_checkable
class Lender(Stateful, Protocol):
    """An object that can be so large that it is written where it lies."""

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        ...

    def lent_state(self) -> AbstractContextManager[State]:
        """Lend the state without a copy; no push gets in before it is handed back."""
        ...


class Saveable(ABC):
    """Saving and pickling for an object that guards its arrays with a lock.

    It has ``_state``, which puts the state together, and ``from_state``.
    """

    __slots__ = ()

    _lock: threading.Lock

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        with self._lock:
            return self._state()

    @contextmanager
    def lent_state(self) -> Iterator[State]:
        """Lend the state without a copy; no push gets in before it is handed back."""
        with self._lock, lending():
            yield self._state()

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self).from_state, (self.to_state(),)

    @abstractmethod
    def _state(self) -> State:
        """Return everything needed to go on; the lock is held."""

    @classmethod
    @abstractmethod
    def from_state(cls, state: State) -> Self:
        """Build an object that goes on exactly where ``state`` was taken."""


_lending = threading.local()


@contextmanager
def lending() -> Iterator[None]:
    """While this is open, :func:`owned` copies nothing in this thread that is contiguous."""
    _lending.open = True
    try:
        yield
    finally:
        _lending.open = False


def owned(array: NDArray[Any]) -> NDArray[Any]:
    """Return a contiguous copy that nobody else writes to."""
    if getattr(_lending, "open", False):
        return np.ascontiguousarray(array)
    return np.array(array, order="C", copy=True)
