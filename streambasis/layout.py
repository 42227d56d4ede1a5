"""How a state lies in an Arrow file, and how it is read back: the format, less digest and files.

One record batch of one row; each array of the state is one column of that row, and its shape is in
the column's type: a vector of m numbers is ``fixed_size_list<double>[m]``, a matrix is a list of
such lists. So arrays of every length lie side by side without padding, and every Arrow
implementation sees their shapes. Everything else is JSON in the schema metadata.

======================  ================================================================
float32, float64        ``float``, ``double``
complex64, complex128   the same, the last dimension twice as long: real, imaginary, ...
int32, int64            ``int32``, ``int64``
bool                    ``uint8``, 0 or 1
======================  ================================================================

The channel names stand in a column as well, for readers that do not show metadata: UTF-8, filled up
with zero bytes to equal length. An array without elements has no column.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterable, Iterator
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis._version import __version__
from streambasis.seal import LARGEST_METADATA, Flaw, seal_text
from streambasis.state import State

SEAL_KEY = b"snapshot"
OUTLINE_KEY = b"state"
CHANNELS = "channels"

# how an array of this dtype is stored: the Arrow type, and how many of those make an element
_STORED = {
    "float32": (pa.float32(), "float32", 1),
    "float64": (pa.float64(), "float64", 1),
    "complex64": (pa.float32(), "float32", 2),
    "complex128": (pa.float64(), "float64", 2),
    "int32": (pa.int32(), "int32", 1),
    "int64": (pa.int64(), "int64", 1),
    "bool": (pa.uint8(), "uint8", 1),
}
_LONGEST = 2**31 - 1
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_OUTLINE_KEYS = {"kind", "facts", "arrays", "parts"}
_ARRAY_KEYS = {"column", "dtype", "shape"}
_DEEPEST = 64

# pyarrow reports a bad file as any of these, depending on where it stumbles
_ARROW_REFUSES = (pa.ArrowException, OSError, ValueError, LookupError, TypeError, MemoryError)

Claim = tuple[np.dtype[Any], tuple[int, ...]]
"""Dtype and shape of an array, as the metadata has it."""


class Sink(Protocol):
    """Whatever takes the bytes of a file in their order."""

    closed: bool

    def write(self, data: Any) -> int:
        """Take the next bytes."""

    def flush(self) -> None:
        """Do nothing: whoever owns the file forces it to the disk."""


def write_arrow(state: State, sink: Sink) -> None:
    """Write a state as an Arrow file whose digests read as zeros.

    Parameters
    ----------
    state : State
    sink : Sink
        Large arrays are handed to it as they lie in memory, without a copy.

    Raises
    ------
    TypeError, ValueError
        If the state holds what the format cannot, such as an array of three dimensions.
    """
    columns: dict[str, NDArray[Any]] = {}
    outline = _outline(state, "", columns, {CHANNELS})
    text = outline_text({"written_by": f"streambasis {__version__}", **outline})
    names = _channels(outline)
    arrays = {} if names is None else {CHANNELS: _names_column(names)}
    arrays |= {name: _column(array) for name, array in columns.items() if array.size}
    schema = pa.schema(
        [pa.field(name, column.type, nullable=False) for name, column in arrays.items()],
        metadata={SEAL_KEY: seal_text(), OUTLINE_KEY: text},
    )
    options = pa.ipc.IpcWriteOptions(compression=None)
    with pa.ipc.new_file(pa.PythonFile(sink, mode="w"), schema, options=options) as writer:
        if arrays:
            writer.write_batch(pa.RecordBatch.from_arrays(list(arrays.values()), schema=schema))


def read_arrow(memory: memoryview) -> State:
    """Read a state back; its arrays are views of the memory.

    Parameters
    ----------
    memory : memoryview
        A whole file whose seal was read, aligned to 8 bytes.

    Raises
    ------
    Flaw
        If the file is not exactly what :func:`write_arrow` makes of some state.

    Notes
    -----
    Nothing is allocated in proportion to what the file claims before the claim was compared with
    the length of the file, and no type of variable width is ever read.
    """
    base = pa.py_buffer(memory)
    try:
        reader = pa.ipc.open_file(base)
        outline, _ = _parsed(reader.schema.metadata or {})
        claims = _distinct(_claims(outline, memory.nbytes))
        names = _channels(outline)
        _check_schema(reader.schema, claims, names)
        expected = 1 if len(reader.schema) else 0
        if reader.num_record_batches != expected:
            raise Flaw(f"it has {reader.num_record_batches} record batches instead of {expected}")
        found: dict[str, NDArray[Any]] = {}
        if expected:
            batch = reader.get_batch(0)
            batch.validate(full=True)
            if batch.num_rows != 1:
                raise Flaw(f"it has {batch.num_rows} rows instead of 1")
            if names is not None:
                stored = _view(memory, base.address, batch.column(CHANNELS), np.dtype("uint8"))
                if stored.tobytes() != b"".join(_padded(names)):
                    raise Flaw("the channel names in its column and in its metadata differ")
            for name, (dtype, shape) in claims.items():
                if math.prod(shape):
                    stored_type = np.dtype(_STORED[dtype.name][1])
                    view = _view(memory, base.address, batch.column(name), stored_type)
                    found[name] = _restored(view, name, dtype, shape)
        state = _state(outline, claims, found)
    except _ARROW_REFUSES as error:
        raise Flaw(f"Arrow cannot read it ({type(error).__name__}: {error})") from error
    except RecursionError as error:
        raise Flaw("its metadata is nested too deeply") from error
    return state


def outline_text(outline: dict[str, Any]) -> str:
    """Return an outline as the JSON that stands in the metadata.

    Notes
    -----
    The text never contains what a digest begins with, so that the seal is found by searching.
    """
    text = json.dumps(outline, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    text = text.replace("sha256:", "sha256\\u003a").replace("streambasis-", "streambasis\\u002d")
    if len(text) > LARGEST_METADATA // 2:
        raise ValueError(f"{len(text)} bytes of facts: a snapshot holds {LARGEST_METADATA // 2}")
    return text


def _outline(
    state: State, prefix: str, columns: dict[str, NDArray[Any]], taken: set[str]
) -> dict[str, Any]:
    """Describe a state for the metadata and collect its arrays by the names of their columns."""
    arrays = {}
    for name, array in state.arrays.items():
        _check_name(name)
        if array.dtype.name not in _STORED or not 1 <= array.ndim <= 2:
            raise TypeError(
                f"array {name!r} of {state.kind}: {array.dtype} in {array.ndim} dimensions; a "
                f"snapshot holds 1 or 2 dimensions of {', '.join(_STORED)}"
            )
        column = prefix + name
        while column in taken:
            column += "_"
        taken.add(column)
        columns[column] = array
        arrays[name] = {"column": column, "dtype": array.dtype.name, "shape": list(array.shape)}
    parts = {}
    for name, part in state.parts.items():
        _check_name(name)
        # the core is the object itself, behind its face: its arrays go by their own names
        inside = prefix if name == "core" else f"{prefix}{name}_"
        parts[name] = _outline(part, inside, columns, taken)
    facts = encoded(state.facts, state.kind)
    return {"kind": state.kind, "facts": facts, "arrays": arrays, "parts": parts}


def _check_name(name: str) -> None:
    if not _NAME.fullmatch(name):
        raise ValueError(f"{name!r}: an array or part is named with letters, digits, underscores")


def encoded(value: Any, where: str) -> Any:
    """Return a fact as JSON holds it: infinities and NaN, which JSON lacks, as one-key objects.

    Raises
    ------
    TypeError
        If it is nothing that comes back exactly, such as a tuple or an array.
    """
    if isinstance(value, np.bool_ | np.integer | np.floating):
        value = value.item()
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else {"$float": repr(float(value))}
    if isinstance(value, list):
        return [encoded(item, f"{where}[{i}]") for i, item in enumerate(value)]
    if isinstance(value, dict):
        for key in value:
            if not isinstance(key, str):
                raise TypeError(f"fact {where}: the key {key!r} is not text")
        return {
            ("$" + key if key.startswith("$") else key): encoded(item, f"{where}.{key}")
            for key, item in value.items()
        }
    raise TypeError(f"fact {where}: {type(value).__name__} does not come back from JSON as it went")


def decoded(value: Any) -> Any:
    """Return the fact that :func:`encoded` was given."""
    if isinstance(value, list):
        return [decoded(item) for item in value]
    if isinstance(value, dict):
        if set(value) == {"$float"}:
            if value["$float"] not in ("inf", "-inf", "nan"):
                raise Flaw(f"a fact claims the number {value['$float']!r}")
            return float(value["$float"])
        return {key.removeprefix("$"): decoded(item) for key, item in value.items()}
    return value


def _channels(outline: dict[str, Any]) -> list[str] | None:
    """Return the channel names of the outermost state that has any."""
    names = outline["facts"].get("channels")
    if isinstance(names, list) and names and all(isinstance(name, str) for name in names):
        return names
    for part in outline["parts"].values():
        found = _channels(part)
        if found is not None:
            return found
    return None


def _padded(names: list[str]) -> list[bytes]:
    raw = [name.encode("utf-8", "surrogatepass") for name in names]
    width = max(1, *map(len, raw))
    return [name.ljust(width, b"\0") for name in raw]


def _names_column(names: list[str]) -> Any:
    raw = _padded(names)
    return _listed(pa.array(raw, pa.binary(len(raw[0]))), len(raw))


def _column(array: NDArray[Any]) -> Any:
    arrow, stored, per_element = _STORED[array.dtype.name]
    flat = np.ascontiguousarray(array).reshape(-1).view(stored)
    column = pa.Array.from_buffers(arrow, flat.size, [None, pa.py_buffer(flat)])
    *outer, last = array.shape
    for length in (last * per_element, *reversed(outer)):
        column = _listed(column, length)
    return column


def _list_type(inner: Any, length: int) -> Any:
    return pa.list_(pa.field("item", inner, nullable=False), length)


def _listed(values: Any, length: int) -> Any:
    if length > _LONGEST:
        raise ValueError(f"{length} elements in one row: an Arrow list holds {_LONGEST}")
    return pa.FixedSizeListArray.from_arrays(values, type=_list_type(values.type, length))


def parsed_outline(memory: memoryview) -> tuple[dict[str, Any], str]:
    """Return the outline in the metadata of a file, and what wrote it.

    Raises
    ------
    Flaw
        If there is none of the right form.
    """
    try:
        metadata = pa.ipc.open_file(pa.py_buffer(memory)).schema.metadata or {}
    except _ARROW_REFUSES as error:
        raise Flaw(f"Arrow cannot read it ({type(error).__name__}: {error})") from error
    return _parsed(metadata)


def _parsed(metadata: dict[bytes, bytes]) -> tuple[dict[str, Any], str]:
    """Return the outline, checked for its form but not for its claims, and what wrote it."""
    if set(metadata) != {SEAL_KEY, OUTLINE_KEY}:
        raise Flaw("its schema metadata has other keys than a snapshot")
    try:
        outline = json.loads(metadata[OUTLINE_KEY])
    except (ValueError, RecursionError) as error:
        raise Flaw(f"its metadata is not readable JSON ({error})") from error
    written_by = outline.pop("written_by", None) if isinstance(outline, dict) else None
    if not isinstance(written_by, str):
        raise Flaw("its metadata does not say what wrote it")
    _check_outline(outline, _DEEPEST)
    return outline, written_by


def _check_outline(outline: Any, depth: int) -> None:
    if not isinstance(outline, dict) or set(outline) != _OUTLINE_KEYS or depth == 0:
        raise Flaw("its metadata does not describe a state")
    if not isinstance(outline["kind"], str) or not isinstance(outline["facts"], dict):
        raise Flaw("its metadata names no kind of state")
    if not isinstance(outline["arrays"], dict) or not isinstance(outline["parts"], dict):
        raise Flaw("its metadata does not list arrays and parts")
    for part in outline["parts"].values():
        _check_outline(part, depth - 1)


def _distinct(claims: Iterable[tuple[str, Claim]]) -> dict[str, Claim]:
    found: dict[str, Claim] = {}
    for column, claim in claims:
        if column in found or column == CHANNELS:
            raise Flaw(f"two arrays are claimed to lie in column {column!r}")
        found[column] = claim
    return found


def _claims(outline: dict[str, Any], size: int) -> Iterator[tuple[str, Claim]]:
    """Yield column, dtype and shape of every array, each checked against the size of the file."""
    for name, claim in outline["arrays"].items():
        if not isinstance(claim, dict) or set(claim) != _ARRAY_KEYS:
            raise Flaw(f"its metadata does not describe the array {name!r}")
        column, dtype, shape = claim["column"], claim["dtype"], claim["shape"]
        if not isinstance(column, str) or not isinstance(dtype, str) or dtype not in _STORED:
            raise Flaw(f"array {name!r} is claimed to be of type {dtype!r}")
        if (
            not isinstance(shape, list)
            or not 1 <= len(shape) <= 2
            or not all(type(length) is int and 0 <= length <= _LONGEST for length in shape)
        ):
            raise Flaw(f"array {name!r} is claimed to have the shape {shape!r}")
        if math.prod(shape) * np.dtype(dtype).itemsize > size:
            raise Flaw(f"array {name!r} is claimed to have the shape {shape}: beyond the file")
        yield column, (np.dtype(dtype), tuple(shape))
    for part in outline["parts"].values():
        yield from _claims(part, size)


def _check_schema(schema: Any, claims: dict[str, Claim], names: list[str] | None) -> None:
    expected = []
    if names is not None:
        binary = pa.binary(len(_padded(names)[0]))
        expected.append(pa.field(CHANNELS, _list_type(binary, len(names)), nullable=False))
    for column, (dtype, shape) in claims.items():
        if math.prod(shape):
            kind, _, per_element = _STORED[dtype.name]
            *outer, last = shape
            for length in (last * per_element, *reversed(outer)):
                kind = _list_type(kind, length)
            expected.append(pa.field(column, kind, nullable=False))
    for field, claimed in zip(schema, expected, strict=False):
        if not field.equals(claimed):
            raise Flaw(f"column {field.name!r} is {field.type}, its metadata says {claimed}")
    if len(schema) != len(expected):
        raise Flaw(f"it has {len(schema)} columns, its metadata describes {len(expected)}")


def _view(memory: memoryview, address: int, column: Any, dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return the numbers of a column as a view of the memory they were read from."""
    width = 1
    while pa.types.is_fixed_size_list(column.type):
        width *= column.type.list_size
        column = column.values
    if pa.types.is_fixed_size_binary(column.type):
        width *= column.type.byte_width
    validity, values = column.buffers()
    start = values.address - address
    if validity is not None or not 0 <= start <= memory.nbytes - width * dtype.itemsize:
        raise Flaw("a column does not lie in the file as it should")
    return np.frombuffer(memory, dtype, width, start)


def _restored(
    view: NDArray[Any], name: str, dtype: np.dtype[Any], shape: tuple[int, ...]
) -> NDArray[Any]:
    if dtype == np.bool_ and view.max() > 1:
        raise Flaw(f"column {name!r} holds truth values other than 0 and 1")
    return view.view(dtype).reshape(shape)


def _state(
    outline: dict[str, Any],
    claims: dict[str, Claim],
    found: dict[str, NDArray[Any]],
) -> State:
    arrays = {}
    for name, claim in outline["arrays"].items():
        dtype, shape = claims[claim["column"]]
        column = claim["column"]
        arrays[name] = found[column] if column in found else np.empty(shape, dtype)
    return State(
        outline["kind"],
        {key.removeprefix("$"): decoded(value) for key, value in outline["facts"].items()},
        arrays,
        {name: _state(part, claims, found) for name, part in outline["parts"].items()},
    )
