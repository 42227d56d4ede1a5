"""What a run over many feeds leaves for readers: decisions and events, cut at the last commit."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pyarrow as pa

from streambasis.errors import HomeError
from streambasis.files import remove_leftovers, replace_file, write_all
from streambasis.watch.segment import SEGMENT_ROWS

READABLE = 0o644
_NAME = re.compile(r"(\d{12})\.arrow")


class Records:
    """Decisions and events in a folder.

    Parameters
    ----------
    path : Path
        The folder, which a fleet has locked.
    rows, events_bytes : int
        How many decisions, and how much of ``events.jsonl``, were committed; what lies beyond is
        cut off.

    Notes
    -----
    A file of decisions has 65,536 rows of any feeds, in the order of the source, and is named by
    the number of its first row. The last one has fewer, and is replaced at each commit.
    """

    def __init__(self, path: Path, rows: int, events_bytes: int) -> None:
        self._folder, events = path / "decisions", path / "events.jsonl"
        self._held: list[pa.Table] = []
        self.rows = rows
        try:
            self._folder.mkdir(exist_ok=True)
            remove_leftovers(self._folder)
            self._cut()
            self._events = os.open(events, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, READABLE)
            if os.fstat(self._events).st_size < events_bytes:
                os.close(self._events)
                raise HomeError(f"{events}: shorter than the run that it belongs to")
            os.ftruncate(self._events, events_bytes)
            os.lseek(self._events, events_bytes, os.SEEK_SET)
        except OSError as error:
            raise _named(path, error) from None

    def _cut(self) -> None:
        """Remove the files behind the last commit, and take back the rows of the last file."""
        first = self.rows - self.rows % SEGMENT_ROWS
        for file in self._folder.iterdir():
            number = _NAME.fullmatch(file.name)
            if number and int(number[1]) > first:
                file.unlink()
            elif number and int(number[1]) == first:
                if self.rows == first:
                    file.unlink()
                    continue
                with pa.OSFile(str(file)) as source:
                    found = pa.ipc.open_file(source).read_all()
                if len(found) < self.rows - first:
                    raise HomeError(f"{file}: shorter than the run that it belongs to")
                self._held = [found.slice(0, self.rows - first)]

    @property
    def events_bytes(self) -> int:
        """How long ``events.jsonl`` is."""
        return os.lseek(self._events, 0, os.SEEK_CUR)

    def take(self, decisions: pa.Table) -> None:
        """Keep decisions; full files are written at once."""
        while len(decisions):
            room = SEGMENT_ROWS - self.rows % SEGMENT_ROWS
            part = decisions.slice(0, room)
            self._held.append(part)
            self.rows += len(part)
            decisions = decisions.slice(room)
            if self.rows % SEGMENT_ROWS == 0:
                self._write(self.rows - SEGMENT_ROWS)
                self._held = []

    def take_event(self, event: Mapping[str, Any]) -> None:
        """Append a closed event."""
        try:
            write_all(self._events, (json.dumps(event, ensure_ascii=False) + "\n").encode())
        except OSError as error:
            raise _named(self._folder.parent, error) from None

    def force(self) -> None:
        """Write the rows that fill no file, and force everything to the disk."""
        if self._held:
            self._write(self.rows - self.rows % SEGMENT_ROWS)
        try:
            os.fsync(self._events)
        except OSError as error:
            raise _named(self._folder.parent, error) from None

    def _write(self, first: int) -> None:
        table = pa.concat_tables(self._held).combine_chunks()
        self._held = [table]
        sink = pa.BufferOutputStream()
        with pa.ipc.new_file(sink, table.schema) as file:
            file.write_table(table)
        content = sink.getvalue()
        try:
            path = self._folder / f"{first:012d}.arrow"
            replace_file(path, lambda file: write_all(file, content), mode=READABLE)
        except OSError as error:
            raise _named(self._folder.parent, error) from None

    def close(self) -> None:
        """Let go of the files."""
        os.close(self._events)


def _named(path: Path, error: OSError) -> HomeError:
    if isinstance(error, HomeError):
        return error
    return HomeError(f"{path}: cannot be written ({error.strerror or error})")
