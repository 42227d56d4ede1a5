"""Payloads of messages as samples: a JSON object, or an Arrow IPC stream of fixed-width columns.

Everything here comes from outside. It is bounded before it is parsed, and nothing is evaluated.
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.arrow import samples_of
from streambasis.feeds.columns import Columns, choose
from streambasis.feeds.objects import ObjectReader, RowError, columns_of, object_of

MOST_PAYLOAD = 1 << 22
"""Bytes of a payload; a larger one is malformed."""

MOST_ROWS = 1 << 16
"""Samples of one payload."""

SEQUENCES = ("sequence", "seq")
"""Keys that hold a sequence number, where they are not asked for as channels."""

ID_BYTES = 8
_CONTINUATION = b"\xff\xff\xff\xff"
_SCHEMA, _RECORD_BATCH = 1, 3


@dataclass(frozen=True, slots=True)
class Content:
    """What a payload holds.

    Attributes
    ----------
    values : ndarray of float64, shape (m, n)
        Its samples, at least one.
    times : ndarray of int64, shape (m,), or None
        Their times in nanoseconds.
    id : bytes or None
        The same for the same message sent again, made of topic, times and sequence numbers; None
        where it has neither.
    faults : list of (int, str)
        Rows that are none, each with the number of samples before it.
    """

    values: NDArray[np.float64]
    times: NDArray[np.int64] | None
    id: bytes | None
    faults: list[tuple[int, str]]


def columns_in(
    name: str, payload: bytes, channels: Sequence[str] | None, time: str | None
) -> Columns:
    """Choose channels and time among what a payload holds.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    payload : bytes
        A sequence number in it is no channel unless it is asked for.
    channels, time
        As of :func:`streambasis.feeds.open_feed`.

    Raises
    ------
    RowError
        If the payload cannot be read.
    FeedError
        If its columns do not fit.
    """
    if payload.startswith(_CONTINUATION):
        schema = _batches(payload)[0].schema
        if channels is None:
            schema = pa.schema([field for field in schema if field.name not in SEQUENCES])
        return choose(name, schema, channels, time)
    found = object_of(payload)
    if channels is None:
        found = {key: found[key] for key in found if key not in SEQUENCES}
    return columns_of(name, found, channels, time)


class PayloadReader:
    """Reads payloads of one feed.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    columns : Columns
        Its channels and its time.
    """

    def __init__(self, name: str, columns: Columns) -> None:
        self._name = name
        self.columns = columns
        self._objects = ObjectReader(columns)
        self._sequence = [key for key in SEQUENCES if key not in columns.channels]

    def read(self, topic: str, payload: bytes) -> Content:
        """Return the samples of a payload.

        Raises
        ------
        RowError
            If it holds none.
        """
        if len(payload) > MOST_PAYLOAD:
            raise RowError(f"the payload is larger than {MOST_PAYLOAD} bytes")
        if payload.startswith(_CONTINUATION):
            return self._read_stream(topic, payload)
        found = object_of(payload)
        values = np.array([self._objects.values(found)])
        times = None
        if self.columns.time is not None:
            times = np.array([self._objects.time(found)], np.int64)
        marks = [found[key] for key in self._sequence if isinstance(found.get(key), int | str)]
        return Content(values, times, _identity(topic, times, marks), [])

    def _read_stream(self, topic: str, payload: bytes) -> Content:
        batches = _batches(payload)
        wanted = self.columns
        try:
            columns = choose(self._name, batches[0].schema, wanted.channels, wanted.time)
        except FeedError as error:
            raise RowError(str(error).removeprefix(f"{self._name}: ")) from None
        if wanted.time is None:
            columns = Columns(columns.channels, None, None)
        faults: list[tuple[int, str]] = []
        parts, count = [], 0
        for batch in batches:
            rows = samples_of(batch, columns)
            values, times, where = rows.joined()
            lines = sorted(rows.faults)
            before = np.searchsorted(where, lines).tolist()
            faults += [
                (count + at, rows.faults[line]) for at, line in zip(before, lines, strict=True)
            ]
            parts.append((values, times))
            count += len(values)
        if not count:
            raise RowError(faults[0][1] if faults else "no samples in it")
        values = np.concatenate([values for values, _ in parts])
        times = (
            None
            if columns.time is None
            else np.concatenate([times for _, times in parts if times is not None])
        )
        marks = [
            batch.column(key).to_pylist()
            for batch in batches
            for key in self._sequence
            if batch.schema.names.count(key) == 1
        ]
        return Content(values, times, _identity(topic, times, marks), faults)


def _identity(topic: str, times: NDArray[np.int64] | None, marks: list[Any]) -> bytes | None:
    if times is None and not marks:
        return None
    digest = hashlib.blake2b(topic.encode(), digest_size=ID_BYTES)
    digest.update(b"" if times is None else times.tobytes())
    digest.update(repr(marks).encode())
    return digest.digest()


def _batches(payload: bytes) -> list[pa.RecordBatch]:
    """Return the record batches of an Arrow IPC stream, at least one.

    Raises
    ------
    RowError
        If it is damaged, packed, has columns of variable width, too many rows, or no batch.

    Notes
    -----
    A packed buffer may claim, or unpack to, any size; a column of variable width was seen to crash
    the reader when damaged. Neither is needed for samples, so both are refused unread.
    """
    _refuse_packed(payload)
    try:
        stream = pa.ipc.open_stream(pa.BufferReader(payload))
        for name, kind in zip(stream.schema.names, stream.schema.types, strict=True):
            if not (
                pa.types.is_primitive(kind) or pa.types.is_decimal(kind) or pa.types.is_null(kind)
            ):
                raise RowError(f"column {name!r} is not of fixed width ({kind})")
        batches, count = [], 0
        for batch in stream:
            count += len(batch)
            if count > MOST_ROWS:
                raise RowError(f"more than {MOST_ROWS} samples in one payload")
            batch.validate(full=True)
            batches.append(batch)
    except (pa.ArrowException, OSError, KeyError, UnicodeDecodeError) as error:
        first_line = str(error).partition("\n")[0]
        raise RowError(f"damaged Arrow IPC stream ({first_line})") from None
    if not batches:
        raise RowError("no samples in it")
    return batches


def _refuse_packed(payload: bytes) -> None:
    """Walk the messages of a stream; see that none is packed or claims too many rows.

    References
    ----------
    Apache Arrow columnar format, "Encapsulated message format", and Message.fbs: a message is a
    table of version, header type, header and body length; a record batch is a table of length,
    nodes, buffers and, where it is packed, compression.
    """
    at = 0
    try:
        while at < len(payload):
            if payload[at : at + 4] != _CONTINUATION:
                raise RowError("damaged Arrow IPC stream (no message where one should begin)")
            (size,) = struct.unpack_from("<i", payload, at + 4)
            if size == 0:
                return
            start = at + 8
            if size < 0 or start + size > len(payload):
                raise RowError("damaged Arrow IPC stream (a message is cut short)")
            metadata = payload[start : start + size]
            (message,) = struct.unpack_from("<I", metadata, 0)
            kind_at, header_at, body_at = (_field(metadata, message, i) for i in (1, 2, 3))
            kind = metadata[kind_at] if kind_at else 0
            (body,) = struct.unpack_from("<q", metadata, body_at) if body_at else (0,)
            if kind == _RECORD_BATCH and header_at:
                header = header_at + struct.unpack_from("<I", metadata, header_at)[0]
                length_at = _field(metadata, header, 0)
                (rows,) = struct.unpack_from("<q", metadata, length_at) if length_at else (0,)
                if not 0 <= rows <= MOST_ROWS:
                    raise RowError(f"more than {MOST_ROWS} samples in one payload")
                if _field(metadata, header, 3):
                    raise RowError("a packed Arrow IPC stream; send it without compression")
            elif kind != _SCHEMA:
                raise RowError("an Arrow IPC stream of more than samples; send plain columns")
            if body < 0:
                raise RowError("damaged Arrow IPC stream (a body of negative length)")
            at = start + size + body
    except (struct.error, IndexError):
        raise RowError("damaged Arrow IPC stream (a table points outside it)") from None


def _field(data: bytes, table: int, index: int) -> int:
    """Return where a field of a flatbuffer table is, 0 if it is absent."""
    (back,) = struct.unpack_from("<i", data, table)
    entries = table - back
    if entries < 0:
        raise IndexError
    (size,) = struct.unpack_from("<H", data, entries)
    slot = 4 + 2 * index
    if slot + 2 > size:
        return 0
    (offset,) = struct.unpack_from("<H", data, entries + slot)
    return table + offset if offset else 0
