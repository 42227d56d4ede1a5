"""The folder that keeps a run: decisions as Arrow files, events as JSON lines, the monitor."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from io import TextIOWrapper
from pathlib import Path
from typing import Any

import pyarrow as pa

from streambasis.errors import HomeError, SnapshotFileError
from streambasis.files import replace_file, write_all
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import save

SEGMENT_ROWS = 1 << 16
"""Decisions per file, about 4 MB: few files over months, and little held in memory."""

READABLE = 0o644


class Home:
    """Writes the decisions and events of one run to a folder.

    Parameters
    ----------
    path : Path
        The folder; made where it does not exist.

    Raises
    ------
    HomeError
        If it cannot be made or written, or holds the results of an earlier run.

    Notes
    -----
    A decisions file appears whole or not at all. Its name is the number of its first sample, so
    that names sort like samples.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._decisions = path / "decisions"
        self._pending: list[pa.Table] = []
        self._rows = 0
        try:
            self._decisions.mkdir(parents=True, exist_ok=True)
            earlier = path / "events.jsonl"
            if earlier.exists() or any(self._decisions.iterdir()):
                raise HomeError(f"{path}: holds an earlier run; choose an empty folder for --home")
            self._events: TextIOWrapper = earlier.open("x", encoding="utf-8")
        except OSError as error:
            raise _named(path, error) from None

    def take(self, decisions: pa.Table) -> bool:
        """Keep the decisions of a batch; full segments are written at once.

        Returns
        -------
        bool
            Whether a segment was written.
        """
        self._pending.append(decisions)
        self._rows += len(decisions)
        if self._rows < SEGMENT_ROWS:
            return False
        whole = pa.concat_tables(self._pending)
        while len(whole) >= SEGMENT_ROWS:
            self._write_decisions(whole.slice(0, SEGMENT_ROWS))
            whole = whole.slice(SEGMENT_ROWS)
        self._pending, self._rows = [whole], len(whole)
        return True

    def take_event(self, event: Mapping[str, Any]) -> None:
        """Append a closed event."""
        try:
            self._events.write(json.dumps(event, ensure_ascii=False) + "\n")
            self._events.flush()
        except OSError as error:
            raise _named(self.path, error) from None

    def keep_progress(self, readings: pa.Table) -> None:
        """Replace the readings of the basis over the run by newer ones."""
        self._write("progress.arrow", readings)

    def keep_snapshot(self, monitor: NoveltyMonitor) -> None:
        """Replace the snapshot of the monitor by a newer one."""
        try:
            save(monitor, self.path / "state.arrow", mode=READABLE)
        except SnapshotFileError as error:
            raise _named(self.path, error) from None

    def close(self) -> None:
        """Write what is left and force the events to the disk."""
        if self._rows:
            self._write_decisions(pa.concat_tables(self._pending))
            self._pending, self._rows = [], 0
        try:
            os.fsync(self._events.fileno())
            self._events.close()
        except OSError as error:
            raise _named(self.path, error) from None

    def _write_decisions(self, decisions: pa.Table) -> None:
        self._write(f"decisions/{decisions['sample'][0].as_py():012d}.arrow", decisions)

    def _write(self, name: str, table: pa.Table) -> None:
        def fill(descriptor: int) -> None:
            sink = pa.BufferOutputStream()
            with pa.ipc.new_file(sink, table.schema) as file:
                file.write_table(table.combine_chunks())
            write_all(descriptor, sink.getvalue())

        try:
            replace_file(self.path / name, fill, mode=READABLE)
        except OSError as error:
            raise _named(self.path, error) from None


def _named(path: Path, error: OSError) -> HomeError:
    if isinstance(error, HomeError):
        return error
    return HomeError(f"{path}: cannot be written ({error.strerror or error})")
