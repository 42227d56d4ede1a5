"""The folder that keeps a run, so that it goes on where it stopped: nothing lost, nothing twice.

``state.arrow`` is the one commit point. It holds the monitor, how far the feed was read, the
decisions that do not fill a file yet, and how much of ``events.jsonl`` and ``malformed.jsonl``
counts; replacing it makes all of that true at once. Whatever else was written since the last commit
is written again, the same, by the run that goes on from there.
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor, wait
from contextlib import ExitStack, suppress
from dataclasses import asdict, dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import pyarrow as pa

from streambasis.errors import HomeError, SnapshotError, SnapshotFileError, StreambasisError
from streambasis.feeds import Malformed, Position
from streambasis.files import lock_folder, remove_leftovers, replace_file, write_all
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import read_state, save
from streambasis.state import State
from streambasis.watch.linelog import READABLE, LineLog
from streambasis.watch.segment import SEGMENT_ROWS, Segment

KIND = "Run"
"""What ``state.arrow`` says it holds."""

NO_WAY_ON = "the run cannot go on from it; restore it from a copy, or start in a new folder"
"""What there is to do about a ``state.arrow`` that cannot be used."""

FORMATS = ("arrow", "parquet")
"""Formats of the files of decisions, and the endings of their names."""

MOST_MALFORMED = 1 << 24
"""Bytes of ``malformed.jsonl``. A feed in which everything is malformed would fill the disk; what
came first is kept, the rest is counted."""

_SEGMENT_NAME = re.compile(rf"(\d{{12}})\.(?:{'|'.join(FORMATS)})")


@dataclass(frozen=True, slots=True)
class _Commit:
    """What one commit makes part of the run."""

    state: State
    segments: list[Segment]
    sizes: tuple[int, ...]
    progress: pa.Table | None


class Home:
    """Keeps the decisions and events of one run in a folder, and the run itself.

    Parameters
    ----------
    path : Path
        The folder; made where it does not exist.
    decisions : {"arrow", "parquet"}
        Format of the files of decisions.

    Attributes
    ----------
    state : State or None
        What was committed last, by an earlier process; None in a new folder.
    bytes : int
        Size of the last snapshot.
    committed : float or None
        When it was written, in seconds from the Unix epoch.

    Raises
    ------
    HomeError
        If another process uses the folder (the message names it), it cannot be written, or it
        holds results without the state that they belong to, or files of the other format.

    Notes
    -----
    A decisions file appears whole. Its name is the number of its first sample, so that names sort
    like samples; all but the last hold the same number of decisions.

    What is taken stays in memory until a commit has written it, in a thread of its own, so that
    scoring does not wait for the disk. One commit is under way at a time. One that fails changes
    nothing: the next writes what this one should have.
    """

    def __init__(self, path: Path, decisions: str = "arrow") -> None:
        if decisions not in FORMATS:
            raise HomeError(f"decisions {decisions!r}: one of {', '.join(FORMATS)}")
        self.path = path
        self.state: State | None = None
        self.bytes = 0
        self.committed: float | None = None
        self._format = decisions
        self._about: dict[str, Any] = {}
        self._segment = Segment(rows=SEGMENT_ROWS)
        self._full: list[Segment] = []
        self._decisions = path / "decisions"
        try:
            self._decisions.mkdir(parents=True, exist_ok=True)
            self._lock = lock_folder(path, "--home")
            try:
                self._open()
            except BaseException:
                os.close(self._lock)
                raise
        except OSError as error:
            raise _named(path, error) from None
        self._thread = ThreadPoolExecutor(1, "streambasis-home")
        self._under_way: tuple[_Commit, Future[None]] | None = None

    def _open(self) -> None:
        for folder in (self.path, self._decisions):
            remove_leftovers(folder)
        names = [self.path / "events.jsonl", self.path / "malformed.jsonl"]
        state = self.path / "state.arrow"
        counted = (0, 0)
        if state.exists():
            counted = self._resume(state)
        elif any(self._decisions.iterdir()) or any(n.exists() and n.stat().st_size for n in names):
            raise HomeError(
                f"{self.path}: holds an earlier run without its state.arrow; choose an empty "
                "folder for --home"
            )
        self._events = LineLog(names[0], counted[0])
        try:
            self._malformed = LineLog(names[1], counted[1])
        except BaseException:
            self._events.close()
            raise

    def _resume(self, path: Path) -> tuple[int, int]:
        """Take over what was committed last; return how many bytes of events and rows count."""
        try:
            state = read_state(path)
            if state.kind != KIND:
                raise HomeError(f"{path}: holds a {state.kind}, not a run")
            self._segment = Segment.from_state(state.parts["decisions"])
            counted = int(state.facts["events_bytes"]), int(state.facts.get("malformed_bytes", 0))
        except SnapshotError as error:
            raise HomeError(f"{error}; {NO_WAY_ON}") from error
        kept = state.facts.get("decisions", "arrow")
        if kept != self._format:
            raise HomeError(
                f"{self.path}: its decisions are kept as {kept}, not {self._format}; give the same "
                "again, or choose another folder for --home"
            )
        for file in self._decisions.iterdir():
            number = _SEGMENT_NAME.fullmatch(file.name)
            if number and int(number[1]) > self._segment.first:
                file.unlink()
        status = path.stat()
        self.bytes, self.committed = status.st_size, status.st_mtime
        self.state = state
        return counted

    @property
    def position(self) -> Position | None:
        """How far the feed was read at the last commit."""
        position: Position | None = None if self.state is None else self.state.facts["position"]
        return position

    @property
    def channels(self) -> tuple[str, ...] | None:
        """Channels of the run at the last commit, None in a new folder."""
        return None if self.state is None else tuple(self.state.parts["core"].facts["channels"])

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

    def go_back(self) -> None:
        """Forget everything since the last commit, which may be one of this process.

        Raises
        ------
        HomeError
            If it cannot be read.
        """
        with suppress(HomeError):
            # one that fails leaves the one before
            self.settle(wait=True)
        self._full = []
        events, malformed = self._resume(self.path / "state.arrow")
        self._events.back_to(events)
        self._malformed.back_to(malformed)

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
            refuse_another(self.path, self.state.facts["about"], about)
        self._about = dict(about)

    @property
    def segment(self) -> Segment:
        """The file of decisions under way, with room for one at least."""
        if self._segment.full:
            self._full.append(self._segment)
            self._segment = self._segment.next()
        return self._segment

    def take_event(self, event: Mapping[str, Any]) -> None:
        """Take a closed event, to be kept by the next commit."""
        self._events.add(_line(event))

    def take_malformed(self, rows: Sequence[Malformed]) -> None:
        """Take malformed rows, to be kept by the next commit as far as there is room."""
        for row in rows:
            line = _line(asdict(row))
            if self._malformed.size + len(line) <= MOST_MALFORMED:
                self._malformed.add(line)

    @property
    def waiting(self) -> int:
        """Files of decisions that are full and wait to be written."""
        return len(self._full) + self._segment.full

    @property
    def waiting_bytes(self) -> int:
        """Bytes of events and malformed rows that wait to be written."""
        return self._events.waiting + self._malformed.waiting

    @property
    def busy(self) -> bool:
        """Whether a commit is under way."""
        return self._under_way is not None

    def start_commit(
        self,
        monitor: NoveltyMonitor,
        facts: Mapping[str, Any],
        parts: Mapping[str, State],
        progress: pa.Table | None = None,
    ) -> None:
        """Begin to make everything taken so far part of the run; only while none is under way.

        Parameters
        ----------
        monitor : NoveltyMonitor
            As it is after the last sample taken.
        facts : mapping
            What else the run needs to go on, such as how far the feed was read; JSON things.
        parts : mapping of str to State
            The states of whatever else goes on with it.
        progress : Table, optional
            Readings of the basis over the run, which replace those that were kept before.
        """
        sizes = self._events.size, self._malformed.size
        held = {"core": monitor.to_state(), "decisions": self.segment.to_state(), **parts}
        own: dict[str, Any] = {"about": self._about, "decisions": self._format}
        own |= {"events_bytes": sizes[0], "malformed_bytes": sizes[1]}
        state = State(KIND, {**facts, **own}, {}, held)
        commit = _Commit(state, list(self._full), sizes, progress)
        self._under_way = commit, self._thread.submit(self._write, commit)

    def wait(self, seconds: float) -> bool:
        """Wait so long for the commit that is under way; return whether there is one."""
        if self._under_way is None:
            return False
        wait([self._under_way[1]], seconds)
        return True

    def settle(self, *, wait: bool = False) -> Mapping[str, Any] | None:
        """Hear what has become of the commit that is under way.

        Parameters
        ----------
        wait : bool
            Until it is through.

        Returns
        -------
        mapping or None
            Its facts, if it has come through; None if there is none or it is still at work.

        Raises
        ------
        HomeError
            If the disk did not take it; the last commit then still stands.
        """
        if self._under_way is None or not (wait or self._under_way[1].done()):
            return None
        (commit, future), self._under_way = self._under_way, None
        try:
            future.result()
        except (OSError, SnapshotFileError) as error:
            raise _named(self.path, error) from None
        del self._full[: len(commit.segments)]
        for log, size in zip((self._events, self._malformed), commit.sizes, strict=True):
            log.keep(size)
        status = os.stat(self.path / "state.arrow")
        self.bytes, self.committed = status.st_size, status.st_mtime
        return commit.state.facts

    def commit(
        self,
        monitor: NoveltyMonitor,
        facts: Mapping[str, Any],
        parts: Mapping[str, State],
        progress: pa.Table | None = None,
    ) -> None:
        """Make everything taken so far part of the run, in one step, and wait for it.

        Raises
        ------
        HomeError
            If the disk does not take it; the last commit then still stands.
        """
        self.start_commit(monitor, facts, parts, progress)
        self.settle(wait=True)

    def _write(self, commit: _Commit) -> None:
        """Write what a commit is made of, the state last."""
        for segment in commit.segments:
            if not segment.written:
                self._write_segment(segment)
                segment.written = True
        for log, size in zip((self._events, self._malformed), commit.sizes, strict=True):
            log.write(size)
        if commit.progress is not None:
            self._write_table("progress.arrow", commit.progress)
        save(commit.state, self.path / "state.arrow")

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
        self._thread.shutdown()
        try:
            with ExitStack() as held:
                # whatever fails, the others are let go of, the lock last
                held.callback(os.close, self._lock)
                held.callback(self._malformed.close)
                held.callback(self._events.close)
                if self._segment.count:
                    self._write_segment(self._segment)
        except OSError as error:
            raise _named(self.path, error) from None

    def _write_segment(self, segment: Segment) -> None:
        self._write_table(f"decisions/{segment.first:012d}.{self._format}", segment.table())

    def _write_table(self, name: str, table: pa.Table) -> None:
        sink = pa.BufferOutputStream()
        if name.endswith(".parquet"):
            import pyarrow.parquet as pq

            pq.write_table(table, sink)
        else:
            with pa.ipc.new_file(sink, table.schema) as file:
                file.write_table(table.combine_chunks())
        content = sink.getvalue()
        replace_file(self.path / name, lambda file: write_all(file, content), mode=READABLE)


def refuse_another(path: Path, before: Mapping[str, Any], about: Mapping[str, Any]) -> None:
    """Raise HomeError if a folder holds a run of something else."""
    for name, value in about.items():
        if before.get(name) != value:
            raise HomeError(
                f"{path}: holds a run with {name} = {before.get(name)!r}, not {value!r}; give the "
                "same again, or choose another folder for --home"
            )


def _line(fields: Mapping[str, Any]) -> bytes:
    return (json.dumps(fields, ensure_ascii=False) + "\n").encode()


def _named(path: Path, error: OSError) -> HomeError:
    if isinstance(error, HomeError):
        return error
    return HomeError(f"{path}: cannot be written ({error.strerror or error})")
