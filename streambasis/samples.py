"""Whatever a caller hands in, as checked arrays: the one place where input is normalized.

Promise: a C-contiguous array of the right dtype is used as it is, without a copy.
"""

from __future__ import annotations

import math
import reprlib
from collections.abc import Iterable, Iterator
from numbers import Number
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from streambasis.errors import SampleError, SampleTypeError, SettingError

if TYPE_CHECKING:
    import pyarrow as pa

DTYPES = ("float32", "float64", "complex64", "complex128")


class Channels:
    """The channels of a feed: how many, and their names.

    Parameters
    ----------
    channels : int or iterable of str
        A count, or distinct names. With a count the names are ``"0"``, ``"1"``, ... and Arrow
        columns are taken in their order; with names they are found by name.

    Raises
    ------
    SettingError
        If there are no channels, a name is not text, or a name comes twice.
    """

    __slots__ = ("count", "named", "names")

    def __init__(self, channels: int | Iterable[str]) -> None:
        if isinstance(channels, str):
            raise SettingError(f"channels={channels!r}: give a count or a sequence of names")
        if isinstance(channels, int | np.integer) and not isinstance(channels, bool):
            self.named = False
            self.names = tuple(str(i) for i in range(int(channels)))
            if channels < 1:
                raise SettingError(f"channels={channels}: a feed has at least one channel")
        else:
            try:
                self.names = tuple(channels)  # type: ignore[arg-type]
            except TypeError:
                raise SettingError(
                    f"channels={channels!r}: give a count or a sequence of names"
                ) from None
            self.named = True
            seen: set[str] = set()
            for name in self.names:
                if not isinstance(name, str):
                    raise SettingError(f"channel {name!r}: a channel name is text")
                if name in seen:
                    raise SettingError(f"channel {name!r} is named twice: names are distinct")
                seen.add(name)
            if not self.names:
                raise SettingError("channels=(): a feed has at least one channel")
        self.count = len(self.names)

    def __len__(self) -> int:
        return self.count

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Channels):
            return NotImplemented
        return self.names == other.names and self.named == other.named

    def __hash__(self) -> int:
        return hash((self.names, self.named))


def checked_dtype(dtype: DTypeLike) -> np.dtype[Any]:
    """Return ``dtype`` as one of the four that the kernels know.

    Raises
    ------
    SettingError
        If it is any other.
    """
    try:
        found = np.dtype(dtype)
    except TypeError:
        found = None
    if found is None or found.name not in DTYPES:
        raise SettingError(f"dtype={dtype!r}: one of {', '.join(DTYPES)}")
    return found


def one_sample(
    sample: Any, channels: Channels, dtype: np.dtype[Any], *, number: int = 0, missing: bool = False
) -> NDArray[Any]:
    """Return one sample as a checked, C-contiguous array of shape (n,).

    Parameters
    ----------
    sample : array_like, shape (n,)
        Values in the order of the channels.
    number : int
        What the sample is called in messages.
    missing : bool
        Whether NaN is let through, as a missing channel.

    Raises
    ------
    SampleError
        If the length is wrong or a value is not finite; the message names sample, channel, value.
    SampleTypeError
        If the values are not numbers, or complex ones for a real dtype.
    """
    array = _numbers(sample, dtype, f"sample {number}")
    if array.shape != (channels.count,):
        raise SampleError(
            f"sample {number}: shape {array.shape}, expected ({channels.count},): "
            "one value per channel"
        )
    _refuse_non_finite(array[None, :], channels, number, missing)
    return array


def many_samples(
    samples: Any, channels: Channels, dtype: np.dtype[Any], *, first: int = 0, missing: bool = False
) -> NDArray[Any]:
    """Return a batch as a checked, C-contiguous array of shape (m, n), all of it or none.

    Parameters
    ----------
    samples : array_like of shape (m, n), or an object of the Arrow PyCapsule protocol
        Arrow columns (pyarrow, polars, pandas, duckdb, ...) are matched to named channels by
        name, and taken in order where channels are only counted. Columns beyond the named
        channels are ignored.
    first : int
        Number of the first sample, for messages.
    missing : bool
        Whether NaN and Arrow nulls are let through, as missing channels.

    Raises
    ------
    SampleError
        If the shape is wrong, a column is missing or doubled, or a value is not finite.
    SampleTypeError
        If the values are not numbers, or complex ones for a real dtype.
    """
    if speaks_arrow(samples):
        array = from_arrow(arrow_table(samples), channels, dtype, missing=missing)
    else:
        array = _numbers(samples, dtype, "batch")
        if array.size == 0 and array.ndim <= 2 and array.shape[-1] in (0, channels.count):
            array = array.reshape(0, channels.count)
        if array.ndim != 2 or array.shape[1] != channels.count:
            raise SampleError(
                f"batch: shape {array.shape}, expected (samples, {channels.count}): "
                "one row per sample, one column per channel"
            )
    _refuse_non_finite(array, channels, first, missing)
    return array


def _culprit(values: Any) -> str:
    """Say which value is the first that is no number, and where it stands, if there is one."""
    for place, value in np.ndenumerate(np.asarray(values, dtype=object)):
        if not isinstance(value, Number):
            position = f" at position {', '.join(map(str, place))}" if place else ""
            return f"; {reprlib.repr(value)}{position} is none"
    return ""


def _numbers(values: Any, dtype: np.dtype[Any], what: str) -> NDArray[Any]:
    try:
        array = np.asarray(values)
    except ValueError as error:
        raise SampleError(f"{what}: rows of different lengths ({error})") from None
    if array.dtype == dtype and array.flags.c_contiguous and array.flags.aligned:
        return array
    if array.size and array.dtype.kind not in "biufc":
        raise SampleTypeError(
            f"{what}: values of type {array.dtype}, expected numbers ({dtype}){_culprit(values)}"
        )
    if array.dtype.kind == "c" and dtype.kind != "c":
        raise SampleTypeError(
            f"{what}: complex values for a {dtype} basis; make it with dtype='complex128'"
        )
    with np.errstate(over="ignore"):  # a float64 beyond float32 becomes inf, refused as such below
        return np.ascontiguousarray(array, dtype=dtype).reshape(array.shape)


def _refuse_non_finite(array: NDArray[Any], channels: Channels, first: int, missing: bool) -> None:
    # a finite sum of squares has finite terms only, and costs a third of looking at each
    flat = array.reshape(-1)
    if math.isfinite(np.vdot(flat, flat).real):
        return
    found = first_refused(array, missing=missing)
    if found is not None:
        row, column = found
        raise SampleError(
            f"sample {first + row}, channel {channels.names[column]!r}: value "
            f"{array[row, column]} is not finite; the sample was not taken"
        )


def first_refused(array: NDArray[Any], *, missing: bool) -> tuple[int, int] | None:
    """Return row and column of the first value that is not finite; NaN is let through if missing.

    Parameters
    ----------
    array : ndarray, shape (m, n)
    missing : bool
        Whether NaN is fine, as a missing channel.
    """
    fine = ~np.isinf(array) if missing else np.isfinite(array)
    if fine.all():
        return None
    row, column = np.argwhere(~fine)[0].tolist()
    return row, column


def speaks_arrow(samples: Any) -> bool:
    """Return whether an object is a table of the Arrow PyCapsule protocol."""
    return hasattr(samples, "__arrow_c_stream__") or hasattr(samples, "__arrow_c_array__")


def arrow_table(samples: Any) -> pa.Table:
    """Return an object of the Arrow PyCapsule protocol as a table, without a copy."""
    import pyarrow as pa

    if hasattr(samples, "__arrow_c_stream__"):
        return pa.table(samples)
    return pa.table(pa.record_batch(samples))


def from_arrow(
    table: pa.Table,
    channels: Channels,
    dtype: np.dtype[Any],
    *,
    missing: bool = False,
) -> NDArray[Any]:
    """Return the channels of an Arrow table as an array, (m, n), whose values may be infinite.

    Raises
    ------
    SampleError, SampleTypeError
        As :func:`many_samples`.
    """
    array = np.empty((table.num_rows, channels.count), dtype=dtype)
    for column, values in enumerate(arrow_columns(table, channels, missing=missing)):
        with np.errstate(over="ignore"):
            array[:, column] = values.to_numpy()
    return array


def arrow_columns(
    table: pa.Table, channels: Channels, *, missing: bool = False
) -> Iterator[pa.ChunkedArray]:
    """Yield the column of each channel of an Arrow table, as floating-point numbers.

    Raises
    ------
    SampleError, SampleTypeError
        As :func:`many_samples`.
    """
    import pyarrow as pa

    names = table.column_names
    if channels.named:
        for name in channels.names:
            found = names.count(name)
            if found != 1:
                times = "is missing" if found == 0 else f"comes {found} times"
                raise SampleError(
                    f"column {name!r} {times} in the batch; its columns: {', '.join(names)}"
                )
        positions = [names.index(name) for name in channels.names]
    else:
        if len(names) != channels.count:
            raise SampleError(
                f"batch: {len(names)} columns for {channels.count} channels without names"
            )
        positions = list(range(channels.count))
    for position in positions:
        values = table.column(position)
        kind = values.type
        if not (
            pa.types.is_integer(kind)
            or pa.types.is_floating(kind)
            or pa.types.is_boolean(kind)
            or pa.types.is_decimal(kind)
            # a column in which nothing was ever measured
            or (missing and pa.types.is_null(kind))
        ):
            raise SampleTypeError(
                f"column {names[position]!r}: values of type {kind}, expected numbers"
            )
        if values.null_count and not missing:
            row = int(np.argmax(values.is_null().to_numpy()))
            raise SampleError(
                f"column {names[position]!r}, row {row}: the value is missing (null); "
                "the batch was not taken"
            )
        if values.null_count or not pa.types.is_floating(kind):
            values = values.cast(pa.float64())
        yield values
