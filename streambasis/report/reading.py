"""What a run has kept, read back from its folder in one pass and bounded memory."""

from __future__ import annotations

import heapq
import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Self

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.errors import RecordError, SnapshotError
from streambasis.monitor.events import History
from streambasis.report.segments import (
    SERIES,
    Decisions,
    decisions_of,
    end_of,
    find,
    segments_of,
    waiting,
)
from streambasis.report.thinning import NO_TIME, Envelope
from streambasis.snapshot import read_state
from streambasis.state import State

STRONGEST = 40
"""Events drawn by channel and compared with each other: more would not be legible."""

DRAWN = (*SERIES, "novel", "extreme")
LARGEST = 2**62
"""Bound of sample and event numbers."""

_UNREADABLE = (ValueError, TypeError, KeyError, AttributeError, OverflowError, RecursionError)
"""What JSON that is no event, or values of the wrong kind, raise."""


@dataclass(frozen=True, slots=True)
class EventRow:
    """One event as its JSON line tells it, without the share of every channel."""

    event: int
    start: int
    end: int
    start_time: str | None
    end_time: str | None
    peak: float
    channels: tuple[str, ...]
    repeats: int | None
    cosine: float | None
    label: str | None

    @classmethod
    def of(cls, fields: dict[str, Any]) -> Self:
        """Take the keys of an event; a value of the wrong kind is a ValueError."""
        texts = [fields[key] for key in ("start_time", "end_time", "label")]
        if not all(text is None or isinstance(text, str) for text in texts):
            raise ValueError("a time or the label is no text")
        number, start, end = (int(fields[key]) for key in ("event", "start", "end"))
        if not (0 <= number < LARGEST and 0 <= start <= end < LARGEST):
            raise ValueError("the event or a sample has no possible number")
        repeats, cosine = fields["repeats"], fields["cosine"]
        return cls(
            number,
            start,
            end,
            texts[0],
            texts[1],
            _finite(fields["peak"]),
            tuple(str(name) for name in fields["channels"]),
            None if repeats is None else int(repeats),
            None if cosine is None else _finite(cosine),
            texts[2],
        )


def _finite(value: Any) -> float:
    number = float(value)
    if not math.isfinite(number):
        raise ValueError(f"{value} is no number")
    return number


@dataclass(frozen=True, slots=True)
class Progress:
    """Readings of the basis over the run.

    Attributes
    ----------
    sample : ndarray of int64, shape (m,)
        The sample after which each reading was taken.
    noise, drift : ndarray of float64, shape (m,)
        Noise floor, and principal angle to the baseline's subspace in radians.
    known : ndarray of int32, shape (m,)
        Directions of adopted behaviour.
    energies : ndarray of float64, shape (m, e)
        The leading energies, NaN beyond the rank.
    about : dict
        What the run said of itself: the name of the feed, its channels, its kind of times.
    """

    sample: NDArray[np.int64]
    noise: NDArray[np.float64]
    drift: NDArray[np.float64]
    known: NDArray[np.int32]
    energies: NDArray[np.float64]
    about: dict[str, Any]


@dataclass(slots=True)
class KeptRun:
    """A run as its folder tells it.

    Attributes
    ----------
    home : Path
        The folder.
    envelope : Envelope
        The decision series by column of a picture.
    events : list of EventRow
        Every closed event, by number.
    shares : dict of int to dict of str to float
        The share of each channel in each of the strongest events.
    unclosed : dict of int to (int, int)
        First and last sample of events that no line of ``events.jsonl`` closes.
    counts : dict of str to int
        Samples in all, judged, novel, extreme.
    first_judged : int or None
        The first sample with a score: the one after the baseline.
    progress : Progress or None
        Readings of the basis, where they were kept.
    directions : dict of int to ndarray of float64, shape (n,)
        The strongest direction of each event that the snapshot holds.
    facts : dict
        Settings of the monitor as the snapshot holds them; empty without one.
    notes : list of str
        What could not be read, one sentence each.
    """

    home: Path
    envelope: Envelope
    events: list[EventRow] = field(default_factory=list)
    shares: dict[int, dict[str, float]] = field(default_factory=dict)
    unclosed: dict[int, tuple[int, int]] = field(default_factory=dict)
    counts: dict[str, int] = field(default_factory=dict)
    first_judged: int | None = None
    progress: Progress | None = None
    directions: dict[int, NDArray[np.float64]] = field(default_factory=dict)
    facts: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    @property
    def strongest(self) -> list[EventRow]:
        """The strongest events, at most 40, by number."""
        return [event for event in self.events if event.event in self.shares]

    @property
    def about(self) -> dict[str, Any]:
        """What the run said of itself; empty where it did not."""
        return {} if self.progress is None else self.progress.about

    @property
    def channels(self) -> list[str]:
        """The channels in the order of the feed, else in that in which events name them."""
        told = self.about.get("channels") or self.facts.get("channels")
        if told:
            return list(told)
        named = (name for shares in self.shares.values() for name in shares)
        return list(dict.fromkeys(named))


def read_run(home: Path, columns: int) -> KeptRun:
    """Read what a run has kept.

    Parameters
    ----------
    home : Path
        The folder given to ``streambasis watch --home``.
    columns : int
        Most columns of the envelope.

    Raises
    ------
    RecordError
        If the folder holds no run, or its decisions cannot be read.

    Notes
    -----
    Decisions are read one record batch at a time, in the order of the names of their files.
    """
    notes: list[str] = []
    # before the files are listed: what a running daemon moves from the snapshot to a file
    # meanwhile is then seen in both instead of in neither
    snapshot = _snapshot(home / "state.arrow", notes)
    segments = segments_of(home)
    late = waiting(snapshot)
    ends = [] if late is None else [late.samples[0], late.samples[-1] + 1]
    if segments:
        ends += [end_of(segments[0], 0), end_of(segments[-1], -1) + 1]
    first, stop = (int(min(ends)), int(max(ends))) if ends else (0, 0)
    run = KeptRun(home, Envelope(first, max(stop - first, 1), columns, DRAWN), notes=notes)
    run.counts = dict.fromkeys(("samples", "judged", "novel", "extreme"), 0)
    spans: dict[int, tuple[int, int]] = {}
    last = first - 1
    for segment in segments:
        for decisions in decisions_of(segment):
            last = _take(run, segment, decisions, last, spans)
    if late is not None and late.samples[-1] > last:
        _take(run, home / "state.arrow", late.after(last), last, spans)
    if run.counts["samples"] < stop - first:
        missing = stop - first - run.counts["samples"]
        run.notes.append(f"{missing:,} samples between the first and the last have no decision.")
    _read_events(run, home / "events.jsonl")
    closed = {event.event for event in run.events}
    run.unclosed = {number: span for number, span in spans.items() if number not in closed}
    run.progress = _read_progress(run, home / "progress.arrow")
    if snapshot is not None:
        _read_monitor(run, snapshot)
    return run


def _take(
    run: KeptRun, source: Path, taken: Decisions, last: int, spans: dict[int, tuple[int, int]]
) -> int:
    """Add decisions to the run; return the number of their last sample."""
    samples, times = taken.samples, taken.times
    stop = run.envelope.first + run.envelope.count
    if samples[0] <= last or samples[-1] >= stop or np.any(np.diff(samples) <= 0):
        raise RecordError(
            f"{source}: samples out of order after sample {last}; move files that do not belong "
            "to the run out of decisions/"
        )
    judged = ~np.isnan(taken.series["spe"])
    # during the baseline there is no basis, and its rank of 0 would only stretch the axis
    series = {
        **taken.series,
        "rank": np.where(judged, taken.series["rank"], np.nan),
        "novel": taken.novel.astype(np.float64),
        "extreme": taken.extreme.astype(np.float64),
    }
    run.envelope.take(samples, None if times[0] == NO_TIME else times, series)
    for name, count in (
        ("samples", len(samples)),
        ("judged", judged.sum()),
        ("novel", taken.novel.sum()),
        ("extreme", taken.extreme.sum()),
    ):
        run.counts[name] += int(count)
    if run.first_judged is None and judged.any():
        run.first_judged = int(samples[judged.argmax()])
    for number in np.unique(taken.events[taken.events >= 0]).tolist():
        inside = samples[taken.events == number]
        begin = spans.get(number, (int(inside[0]), 0))[0]
        spans[number] = begin, int(inside[-1])
    return int(samples[-1])


def _read_events(run: KeptRun, path: Path) -> None:
    """Read events line by line; the shares of all channels are kept of the strongest alone."""
    if not path.exists():
        run.notes.append("There is no events.jsonl, so no event is shown.")
        return
    found: dict[int, EventRow] = {}
    strongest: list[tuple[float, int, dict[str, float]]] = []
    try:
        with path.open(encoding="utf-8", errors="replace") as lines:
            for number, line in enumerate(lines, 1):
                if not line.strip():
                    continue
                try:
                    fields = json.loads(line)
                    row = EventRow.of(fields)
                    shares = {
                        str(name): _finite(share) for name, share in fields["contributions"].items()
                    }
                except _UNREADABLE:
                    # a line that is being written, or one that somebody edited
                    run.notes.append(f"Line {number} of events.jsonl is no event and was left out.")
                    continue
                if row.event not in found:
                    entry = (row.peak, row.event, shares)
                    if len(strongest) < STRONGEST:
                        heapq.heappush(strongest, entry)
                    else:
                        heapq.heappushpop(strongest, entry)
                found[row.event] = row
    except OSError as error:
        raise RecordError(f"{path}: cannot be read ({error.strerror or error})") from None
    run.events = [found[number] for number in sorted(found)]
    run.shares = {number: shares for _, number, shares in sorted(strongest, key=lambda e: e[1])}


def _read_progress(run: KeptRun, path: Path) -> Progress | None:
    if not path.exists():
        return None
    try:
        with pa.OSFile(str(path)) as source:
            table = pa.ipc.open_file(source).read_all()
        about = json.loads((table.schema.metadata or {}).get(b"about", b"{}"))
        adopt = about.get("adopt_after")
        if not (adopt is None or isinstance(adopt, int)):
            raise ValueError(f"adopt_after={adopt!r}")
        about["channels"] = [str(name) for name in about.get("channels") or []]
        width = table.schema.field("energies").type.list_size
        energies = table["energies"].combine_chunks().flatten().to_numpy(zero_copy_only=False)
        return Progress(
            table["sample"].cast(pa.int64()).to_numpy(),
            table["noise"].cast(pa.float64()).to_numpy(),
            table["drift"].cast(pa.float64()).to_numpy(),
            table["known"].cast(pa.int32()).to_numpy(),
            energies.reshape(-1, width),
            about,
        )
    except (OSError, pa.ArrowException, *_UNREADABLE) as error:
        detail = str(error).splitlines()[0]
        run.notes.append(f"progress.arrow cannot be read ({detail}).")
        return None


def _snapshot(path: Path, notes: list[str]) -> State | None:
    if not path.exists():
        return None
    try:
        return read_state(path)
    except SnapshotError as error:
        notes.append(f"state.arrow cannot be read ({error}).")
        return None


def _read_monitor(run: KeptRun, snapshot: State) -> None:
    """Take the settings of the monitor and the directions of its events."""
    monitor = find(snapshot, "NoveltyMonitor")
    if monitor is None:
        run.notes.append("state.arrow holds no monitor.")
        return
    run.facts = {
        "channels": monitor.facts["channels"],
        "baseline": monitor.facts["baseline"],
        **monitor.facts["settings"],
    }
    part = find(monitor, "History")
    if part is not None:
        events = History.from_state(part).events
        run.directions = {number: event.direction for number, event in events.items()}
