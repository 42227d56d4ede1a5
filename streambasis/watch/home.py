"""The folder that keeps a run, so that it goes on where it stopped: nothing lost, nothing twice.

``state.arrow`` is the one commit point. It holds the monitor, how far the feed was read, the
decisions that do not fill a file yet, and how much of ``events.jsonl`` counts; replacing it makes
all of that true at once. Whatever else was written since the last commit is written again, the
same, by the run that goes on from there.
"""

from __future__ import annotations

import fcntl
import json
import os
import re
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import pyarrow as pa

from streambasis.errors import HomeError, SnapshotError, SnapshotFileError, StreambasisError
from streambasis.feeds import Position
from streambasis.files import remove_leftovers, replace_file, write_all
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import read_state, save
from streambasis.state import State
from streambasis.watch.segment import SEGMENT_ROWS, Segment

READABLE = 0o644
KIND = "Run"
"""What ``state.arrow`` says it holds."""

_SEGMENT_NAME = re.compile(r"(\d{12})\.arrow")


class Home:
    """Keeps the decisions and events of one run in a folder, and the run itself.

    Parameters
    ----------
    path : Path
        The folder; made where it does not exist.

    Attributes
    ----------
    state : State or None
        What was committed last, by an earlier process; None in a new folder.

    Raises
    ------
    HomeError
        If another process uses the folder (the message names it), it cannot be written, or it
        holds results without the state that they belong to.

    Notes
    -----
    A decisions file appears whole. Its name is the number of its first sample, so that names sort
    like samples; all but the last hold the same number of decisions.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.state: State | None = None
        self._about: dict[str, Any] = {}
        self._segment = Segment(rows=SEGMENT_ROWS)
        self._decisions = path / "decisions"
        try:
            self._decisions.mkdir(parents=True, exist_ok=True)
            self._lock = _locked(path)
            try:
                self._open()
            except BaseException:
                os.close(self._lock)
                raise
        except OSError as error:
            raise _named(path, error) from None

    def _open(self) -> None:
        events, state = self.path / "events.jsonl", self.path / "state.arrow"
        for folder in (self.path, self._decisions):
            remove_leftovers(folder)
        counted = 0
        if state.exists():
            counted = self._resume(state)
        elif any(self._decisions.iterdir()) or (events.exists() and events.stat().st_size):
            raise HomeError(
                f"{self.path}: holds an earlier run without its state.arrow; choose an empty "
                "folder for --home"
            )
        self._events = os.open(events, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, READABLE)
        if os.fstat(self._events).st_size < counted:
            os.close(self._events)
            raise HomeError(f"{events}: shorter than the run that state.arrow belongs to")
        os.ftruncate(self._events, counted)
        os.lseek(self._events, counted, os.SEEK_SET)
        self._synced = counted

    def _resume(self, path: Path) -> int:
        """Take over what was committed last; return how many bytes of the events count."""
        try:
            state = read_state(path)
            if state.kind != KIND:
                raise HomeError(f"{path}: holds a {state.kind}, not a run")
            self._segment = Segment.from_state(state.parts["decisions"])
            counted = int(state.facts["events_bytes"])
        except SnapshotError as error:
            raise HomeError(f"{error}; the run cannot go on from it") from error
        for file in self._decisions.iterdir():
            number = _SEGMENT_NAME.fullmatch(file.name)
            if number and int(number[1]) > self._segment.first:
                file.unlink()
        self.state = state
        return counted

    @property
    def position(self) -> Position | None:
        """How far the feed was read at the last commit."""
        position: Position | None = None if self.state is None else self.state.facts["position"]
        return position

    def monitor(self) -> NoveltyMonitor | None:
        """Return the monitor of the last commit, None in a new folder.

        Raises
        ------
        HomeError
            If its state does not fit together.
        """
        if self.state is None:
            return None
        try:
            return NoveltyMonitor.from_state(self.state.parts["core"])
        except StreambasisError as error:
            raise HomeError(f"{self.path / 'state.arrow'}: {error}") from error

    def begin(self, about: Mapping[str, Any]) -> None:
        """Say what the run is of.

        Parameters
        ----------
        about : mapping
            Feed, channels and settings, as JSON holds them.

        Raises
        ------
        HomeError
            If the folder holds a run of something else.
        """
        if self.state is not None:
            before = self.state.facts["about"]
            for name, value in about.items():
                if before.get(name) != value:
                    raise HomeError(
                        f"{self.path}: holds a run with {name} = {before.get(name)!r}, not "
                        f"{value!r}; give the same again, or choose another folder for --home"
                    )
        self._about = dict(about)

    def take(self, decisions: pa.Table) -> bool:
        """Keep the decisions of a batch; full files are written at once.

        Returns
        -------
        bool
            Whether a file was written.
        """
        written = False
        while len(decisions):
            decisions = decisions.slice(self._segment.take(decisions))
            if self._segment.full:
                self._write_segment()
                self._segment.start_next()
                written = True
        return written

    def take_event(self, event: Mapping[str, Any]) -> None:
        """Append a closed event."""
        line = json.dumps(event, ensure_ascii=False) + "\n"
        try:
            write_all(self._events, line.encode())
        except OSError as error:
            raise _named(self.path, error) from None

    def keep_progress(self, readings: pa.Table) -> None:
        """Replace the readings of the basis over the run by newer ones."""
        self._write("progress.arrow", readings)

    def commit(
        self, monitor: NoveltyMonitor, facts: Mapping[str, Any], parts: Mapping[str, State]
    ) -> None:
        """Make everything taken so far part of the run, in one step.

        Parameters
        ----------
        monitor : NoveltyMonitor
            As it is after the last sample taken.
        facts : mapping
            What else the run needs to go on, such as how far the feed was read; JSON things.
        parts : mapping of str to State
            The states of whatever else goes on with it.

        Raises
        ------
        HomeError
            If the disk does not take it; the last commit then still stands.
        """
        try:
            size = os.lseek(self._events, 0, os.SEEK_CUR)
            if size != self._synced:
                os.fsync(self._events)
                self._synced = size
            held = {"core": monitor.to_state(), "decisions": self._segment.to_state(), **parts}
            state = State(KIND, {**facts, "about": self._about, "events_bytes": size}, {}, held)
            save(state, self.path / "state.arrow")
        except (OSError, SnapshotFileError) as error:
            raise _named(self.path, error) from None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Write the decisions that fill no file, for readers, and let go of the folder.

        Nothing is committed: a run that goes on writes them again, with those that follow.
        """
        try:
            if self._segment.count:
                self._write_segment()
        finally:
            os.close(self._events)
            os.close(self._lock)

    def _write_segment(self) -> None:
        self._write(f"decisions/{self._segment.first:012d}.arrow", self._segment.table())

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


def _locked(path: Path) -> int:
    """Return the descriptor of the lock, held until it is closed or the process ends."""
    descriptor = os.open(path / "lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, READABLE)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        process = os.pread(descriptor, 32, 0).decode("ascii", "replace").strip()
        os.close(descriptor)
        raise HomeError(
            f"{path}: in use by another streambasis (process {process or 'unknown'}); stop it, or "
            "choose another folder for --home"
        ) from None
    os.ftruncate(descriptor, 0)
    os.pwrite(descriptor, f"{os.getpid()}\n".encode(), 0)
    return descriptor


def _named(path: Path, error: OSError) -> HomeError:
    if isinstance(error, HomeError):
        return error
    return HomeError(f"{path}: cannot be written ({error.strerror or error})")
