"""CSV: names from the first line, rows from the others, faults told row by row."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray
from pyarrow import csv as arrow_csv

from streambasis.errors import FeedError
from streambasis.feeds.columns import choose, times_of, values_of
from streambasis.feeds.keys import Keys
from streambasis.feeds.lines import Lines
from streambasis.feeds.rows import Rows

_SEPARATORS = (",", ";", "\t")
_NO_VALUE = frozenset(arrow_csv.ConvertOptions().null_values)
_SHOWN = 40


class CsvRows:
    """Parses the lines of a CSV file.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    peek : bytes
        The first lines of the file.
    channels, time, keys
        As of :func:`streambasis.feeds.open_feed`.

    Notes
    -----
    The separator is a comma, a semicolon or a tab. Whether a column holds numbers or timestamps is
    what most of its first values are: an odd word is a malformed row. Every channel is read as
    float64: what the first block looks like never decides how a later one is parsed. Empty fields
    and the usual words for a missing value (``NA``, ``NaN``, ``null``) become NaN.
    """

    def __init__(
        self,
        name: str,
        peek: bytes,
        channels: Sequence[str] | None,
        time: str | None,
        keys: Keys | None = None,
    ) -> None:
        self._name = name
        first, _, body = peek.partition(b"\n")
        try:
            header = first.decode("utf-8-sig").rstrip("\r")
        except UnicodeDecodeError as error:
            raise FeedError(
                f"{name}: byte {error.start} is not UTF-8 text; save the file as UTF-8"
            ) from None
        self._separator = max(_SEPARATORS, key=header.count)
        self._use_names(self._split(header))
        if not any(self._names):
            state = "cannot be read" if header.strip() else "is blank"
            raise FeedError(f"{name}: the first line {state}; it should hold column names")
        if all(_is_number(column) for column in self._names):
            raise FeedError(f"{name}: the first line holds numbers; it should hold column names")
        schema = self._types(body)
        self.columns = choose(name, schema, channels, time, keys)
        self._kinds = {column: pa.float64() for column in self.columns.channels}
        if keys is not None:
            self._kinds[keys.column] = pa.string()
        if self.columns.time is not None:
            self._kinds[self.columns.time] = self._time_kind(schema.field(self.columns.time).type)
        self._prepare()

    def _time_kind(self, found: pa.DataType) -> pa.DataType:
        if self.columns.unit is None:
            return pa.timestamp("ns", found.tz if pa.types.is_timestamp(found) else None)
        # whole seconds in the first rows may be followed by fractions; of nanoseconds there are
        # none, and float64 would not hold them
        return pa.int64() if self.columns.unit == 1 else pa.float64()

    def _split(self, header: str) -> list[str]:
        try:
            return next(csv.reader([header], delimiter=self._separator), [])
        except csv.Error:
            # a carriage return in the middle, or a NUL
            return []

    def _use_names(self, names: list[str]) -> None:
        self._names = names
        # numbers instead of names: a name may come twice among the columns that nobody asks for
        numbered = [str(number) for number in range(len(names))]
        self._read: dict[str, Any] = {"column_names": numbered, "use_threads": False}

    def _prepare(self) -> None:
        """Set up the parser for the names of the file in hand."""
        self._parse = arrow_csv.ParseOptions(delimiter=self._separator)
        numbers = {self._names.index(name): kind for name, kind in self._kinds.items()}
        self._order = [str(number) for number in numbers]
        self._convert = arrow_csv.ConvertOptions(
            column_types={str(number): kind for number, kind in numbers.items()},
            include_columns=self._order,
            true_values=[],
            false_values=[],
        )
        self._as_text = arrow_csv.ConvertOptions(
            column_types={number: pa.string() for number in self._order},
            include_columns=self._order,
            strings_can_be_null=True,
        )

    def _types(self, body: bytes) -> pa.Schema:
        """Return names and types as the first rows show them."""
        text = body.decode("utf-8", "backslashreplace").encode()
        try:
            table = arrow_csv.read_csv(
                io.BytesIO(text),
                read_options=arrow_csv.ReadOptions(**self._read, block_size=len(text) + 1),
                parse_options=arrow_csv.ParseOptions(
                    delimiter=self._separator, invalid_row_handler=lambda _: "skip"
                ),
            )
        except pa.ArrowInvalid:
            # nothing to go by: no row at all, or none that can be parsed
            return pa.schema([(name, pa.null()) for name in self._names])
        return pa.schema([(name, _type(table.column(i))) for i, name in enumerate(self._names)])

    def begin(self, line: bytes) -> bool:
        """Hear the first line of a file; return whether it holds names.

        Raises
        ------
        FeedError
            If it holds names, but not all that are needed.
        """
        try:
            names = self._split(line.decode("utf-8-sig").rstrip("\r\n"))
        except UnicodeDecodeError:
            return False
        if names == self._names:
            return True
        missing = [name for name in self._kinds if names.count(name) != 1]
        if len(missing) == len(self._kinds):
            # the writer goes on without repeating the names
            return False
        if missing:
            raise FeedError(f"{self._name}: a new file begins without a column {missing[0]!r}")
        self._use_names(names)
        self._prepare()
        return True

    def parse(self, lines: Lines) -> Rows:
        """Parse lines; blank ones hold no row."""
        rows = Rows.empty(len(self.columns.read), self.columns.time is not None)
        if not len(lines):
            return rows
        data = np.frombuffer(lines.data, np.uint8)
        starts = np.concatenate([[0], lines.ends[:-1]])
        lengths = lines.ends - starts
        leading = data[starts]
        blank = (leading == 10) | ((leading == 13) & (lengths <= 2))
        kept = np.flatnonzero(~blank)
        if not len(kept):
            return rows
        table = self._table(lines.data, len(kept))
        if table is None:
            faults = self._faults(lines, kept)
            good = np.array([i for i in kept if int(i) not in faults], dtype=np.int64)
            rows.faults.update(faults)
            self._halve(lines, good, rows)
        else:
            self._take(table, kept, rows)
        return rows

    def _table(self, data: bytes, rows: int) -> pa.Table | None:
        """Parse bytes that should hold so many rows; return None if they do not."""
        if data.count(b"\r") != data.count(b"\r\n"):
            # a carriage return inside a line would count as the end of a row
            return None
        try:
            table = arrow_csv.read_csv(
                pa.BufferReader(data),
                read_options=arrow_csv.ReadOptions(**self._read, block_size=len(data) + 1),
                parse_options=self._parse,
                convert_options=self._convert,
            )
        except pa.ArrowInvalid:
            return None
        return table if len(table) == rows else None

    def _take(self, table: pa.Table, kept: NDArray[np.int64], rows: Rows) -> None:
        batch = table.combine_chunks().to_batches()[0]
        values = np.empty((len(batch), len(self.columns.read)))
        values_of(batch.columns[: values.shape[1]], values, self.columns.keys)
        if self.columns.keys is not None:
            rows.note_keys(kept, values[:, -1], self.columns.keys.column)
        times = None
        if self.columns.time is not None:
            times, missing, outside = times_of(batch.columns[-1], self.columns)
            rows.note_times(kept, missing, outside, self.columns.time)
        rows.add(values, times, kept, self.columns.read)

    def _faults(self, lines: Lines, kept: NDArray[np.int64]) -> dict[int, str]:
        """Return the lines that are seen to be malformed, with the reason of each."""
        faults: dict[int, str] = {}
        good: list[int] = []
        for i in kept.tolist():
            line = lines.text(i)
            count = line.count(self._separator.encode()) + 1
            if b'"' in line:
                count = len(self._split(line.decode("utf-8", "replace").rstrip("\r\n")))
            if count != len(self._names):
                faults[i] = f"{len(self._names)} columns expected, {count} found"
            else:
                good.append(i)
        joined = b"".join(lines.text(i).rstrip(b"\r\n") + b"\n" for i in good)
        try:
            table = arrow_csv.read_csv(
                pa.BufferReader(joined),
                read_options=arrow_csv.ReadOptions(**self._read, block_size=len(joined) + 1),
                parse_options=self._parse,
                convert_options=self._as_text,
            )
        except pa.ArrowInvalid:
            return faults
        if len(table) != len(good):
            return faults
        for position, name in enumerate(self._kinds):
            kind, column = self._kinds[name], table.column(position)
            if _all_fit(column, kind):
                continue
            for i, text in zip(good, column.to_pylist(), strict=True):
                if i not in faults and text is not None and not _fits(text, kind):
                    shown = text if len(text) <= _SHOWN else text[:_SHOWN] + "..."
                    faults[i] = f"column {name!r}: invalid value {shown!r}"
        return faults

    def _halve(self, lines: Lines, kept: NDArray[np.int64], rows: Rows) -> None:
        """Parse lines, and where that fails each half of them, down to the lines that do."""
        waiting = [kept] if len(kept) else []
        while waiting:
            part = waiting.pop()
            data = b"".join(lines.text(int(i)) for i in part)
            table = self._table(data, len(part))
            if table is not None:
                self._take(table, part, rows)
            elif len(part) == 1:
                rows.faults[int(part[0])] = "cannot be parsed"
            else:
                middle = len(part) // 2
                waiting += [part[middle:], part[:middle]]


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _all_fit(column: pa.ChunkedArray, kind: pa.DataType) -> bool:
    try:
        pc.utf8_trim_whitespace(column).cast(kind)
    except pa.ArrowInvalid:
        return False
    return True


def _fits(text: str, kind: pa.DataType) -> bool:
    if pa.types.is_string(kind):
        return True
    text = text.strip()
    if text in _NO_VALUE:
        return True
    if pa.types.is_timestamp(kind):
        try:
            pa.scalar(text).cast(kind)
        except pa.ArrowInvalid:
            return False
        return True
    return _is_number(text)


def _type(column: pa.ChunkedArray) -> pa.DataType:
    """Return the type of a column; among texts, the one that most of the values have."""
    if pa.types.is_boolean(column.type):
        # true and false are words here, and words are no channel
        return pa.string()
    if not pa.types.is_string(column.type):
        return column.type
    texts = [text for text in column.to_pylist() if text and text.strip() not in _NO_VALUE]
    for kind in (pa.float64(), pa.timestamp("ns"), pa.timestamp("ns", "UTC")):
        if 2 * sum(_fits(text, kind) for text in texts) > len(texts):
            return kind
    return pa.string()
