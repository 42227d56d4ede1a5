"""What the bases answer: one small record per sample, or one array per field for a batch."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pyarrow as pa

REASONS = ("independent", "dependent", "full", "zero")
"""Why a sample grew the basis or did not; the kernels speak of them by their position here."""
_NAMES = np.array(REASONS)


class Decision(NamedTuple):
    """What became of one sample pushed to a :class:`~streambasis.StreamBasis`.

    Attributes
    ----------
    sample : int
        Number of the sample, counted from 0 over the life of the basis.
    norm, residual, tolerance : float
        Norm of the sample, norm of its part outside the basis, and what that was compared with;
        all in the units of the inner product.
    grew : bool
        Whether the sample added a direction.
    reason : str
        ``"independent"``, ``"dependent"``, ``"full"`` (independent, but the capacity is reached)
        or ``"zero"``.
    rank : int
        Directions after the sample.
    passes : int
        Gram-Schmidt passes spent on it.
    expired, dropped : int
        Samples that left the window at this push, and directions that left with them.
    """

    sample: int
    norm: float
    residual: float
    tolerance: float
    grew: bool
    reason: str
    rank: int
    passes: int
    expired: int
    dropped: int


class Score(NamedTuple):
    """What a :class:`~streambasis.PrincipalBasis` says of one sample.

    Attributes
    ----------
    sample : int
        Number of the sample, counted from 0 over the life of the basis.
    norm, residual : float
        Norm of the sample (about the running mean where there is one) and of its part outside
        the basis.
    spe : float
        Squared prediction error: the residual squared.
    t2 : float
        Hotelling's T²: the sum of squared coordinates over the energies.
    rank : int
        Directions that the sample was scored against.
    """

    sample: int
    norm: float
    residual: float
    spe: float
    t2: float
    rank: int


@dataclass(frozen=True, slots=True, eq=False)
class _Columns:
    """Records kept as one array per field; row ``i`` is the record of the ``i``-th sample."""

    def __len__(self) -> int:
        return len(getattr(self, fields(self)[0].name))

    def to_arrow(self) -> pa.RecordBatch:
        """Return the fields as columns of an Arrow record batch, numbers without a copy."""
        import pyarrow as pa

        names = [f.name for f in fields(self)]
        return pa.RecordBatch.from_arrays([pa.array(getattr(self, n)) for n in names], names=names)


@dataclass(frozen=True, slots=True, eq=False)
class Decisions(_Columns):
    """The decisions of a batch, one array per field of :class:`Decision`, each of shape (m,)."""

    sample: NDArray[np.int64]
    norm: NDArray[np.float64]
    residual: NDArray[np.float64]
    tolerance: NDArray[np.float64]
    grew: NDArray[np.bool_]
    reason: NDArray[np.str_]
    rank: NDArray[np.int64]
    passes: NDArray[np.int64]
    expired: NDArray[np.int64]
    dropped: NDArray[np.int64]

    def __getitem__(self, row: int) -> Decision:
        return Decision(*(getattr(self, f.name)[row].item() for f in fields(self)))

    def __iter__(self) -> Iterator[Decision]:
        return (self[row] for row in range(len(self)))


@dataclass(frozen=True, slots=True, eq=False)
class Scores(_Columns):
    """The scores of a batch, one array per field of :class:`Score`, each of shape (m,)."""

    sample: NDArray[np.int64]
    norm: NDArray[np.float64]
    residual: NDArray[np.float64]
    spe: NDArray[np.float64]
    t2: NDArray[np.float64]
    rank: NDArray[np.int64]

    def __getitem__(self, row: int) -> Score:
        return Score(*(getattr(self, f.name)[row].item() for f in fields(self)))

    def __iter__(self) -> Iterator[Score]:
        return (self[row] for row in range(len(self)))


def reason_names(codes: NDArray[Any]) -> NDArray[np.str_]:
    """Turn an array of reason codes into an array of their names."""
    names: NDArray[np.str_] = _NAMES.take(codes)
    return names
