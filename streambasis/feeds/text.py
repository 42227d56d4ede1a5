"""CSV files as feeds."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator, Sequence
from pathlib import Path

import pyarrow as pa
from pyarrow import csv as arrow_csv

from streambasis.errors import FeedError
from streambasis.feeds.columns import choose
from streambasis.feeds.reading import Batch, recut

PEEK_BYTES = 1 << 18
"""How much of the file is read to learn its separator, names and types."""

BLOCK_BYTES = 1 << 18
_SEPARATORS = (",", ";", "\t")
_ROW = re.compile(r"Row #(\d+): ?")
_COLUMN = re.compile(r"In CSV column #(\d+): ")


class CsvFeed:
    """A CSV file with a line of column names, read block by block.

    Notes
    -----
    The separator is a comma, a semicolon or a tab. Every channel is read as float64: what the
    first block looks like never decides how a later one is parsed. Empty fields and the usual
    words for a missing value (``NA``, ``NaN``, ``null``) become NaN.
    """

    def __init__(self, path: Path, channels: Sequence[str] | None, time: str | None) -> None:
        self.name = str(path)
        peek = self._peek(path)
        lines = peek.splitlines()
        separator = max(_SEPARATORS, key=lines[0].count)
        self._names = names = next(csv.reader([lines[0]], delimiter=separator), [])
        if not any(names):
            raise FeedError(f"{self.name}: the first line is blank; it should hold column names")
        if all(_is_number(name) for name in names):
            raise FeedError(
                f"{self.name}: the first line holds numbers; it should hold column names"
            )
        self._parse = arrow_csv.ParseOptions(delimiter=separator)
        schema = self._types(peek)
        self.columns = choose(self.name, schema, channels, time)
        kinds = {name: pa.float64() for name in self.columns.channels}
        if self.columns.time is not None:
            found = schema.field(self.columns.time).type
            kinds[self.columns.time] = (
                pa.timestamp("ns", found.tz) if pa.types.is_timestamp(found) else found
            )
            if self.columns.unit is not None:
                # whole seconds in the first rows may be followed by fractions
                kinds[self.columns.time] = pa.float64()
        self._convert = arrow_csv.ConvertOptions(
            column_types=kinds,
            include_columns=list(kinds),
            true_values=[],
            false_values=[],
        )
        longest = max(len(line) for line in lines)
        self._block = max(BLOCK_BYTES, 16 * longest)
        body = len(peek) - len(lines[0])
        self.rows: int | None = (
            round((path.stat().st_size - len(lines[0])) * (len(lines) - 1) / body) if body else 0
        )
        self._path = path

    def _peek(self, path: Path) -> str:
        with path.open("rb") as file:
            beginning = file.read(PEEK_BYTES)
            # a line must be whole to be understood; with thousands of channels one line is long
            while b"\n" not in beginning and (more := file.read(PEEK_BYTES)):
                beginning += more
            whole = len(beginning) < PEEK_BYTES
        if not whole:
            beginning = beginning[: beginning.rfind(b"\n") + 1]
        try:
            return beginning.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            raise FeedError(
                f"{self.name}: byte {error.start} is not UTF-8 text; save the file as UTF-8"
            ) from None

    def _types(self, peek: str) -> pa.Schema:
        """Return names and types as the beginning of the file shows them."""
        try:
            table = arrow_csv.read_csv(
                io.BytesIO(peek.encode()),
                read_options=arrow_csv.ReadOptions(use_threads=False),
                parse_options=self._parse,
            )
        except pa.ArrowInvalid as error:
            raise self._named(error) from None
        # true and false are words here, and words are no channel
        kinds = [pa.string() if pa.types.is_boolean(k) else k for k in table.schema.types]
        return pa.schema(list(zip(self._names, kinds, strict=True)))

    def _named(self, error: pa.ArrowInvalid) -> FeedError:
        """Return what Arrow says with the file, the line and the column by name."""
        text = str(error).partition("\n")[0]
        row, column = _ROW.search(text), _COLUMN.search(text)
        line = f", line {row.group(1)}" if row else ""
        name = f", column {self._names[int(column.group(1))]!r}" if column else ""
        return FeedError(f"{self.name}{line}{name}: {_COLUMN.sub('', _ROW.sub('', text))}")

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order."""
        yield from recut(self.name, self.columns, self._read())

    def _read(self) -> Iterator[pa.RecordBatch]:
        try:
            with arrow_csv.open_csv(
                self._path,
                read_options=arrow_csv.ReadOptions(use_threads=False, block_size=self._block),
                parse_options=self._parse,
                convert_options=self._convert,
            ) as reader:
                yield from reader
        except pa.ArrowInvalid as error:
            raise self._named(error) from None


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
