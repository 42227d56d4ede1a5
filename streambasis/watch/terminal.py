"""What a run shows: a line per event, a progress bar on a terminal, a summary at the end."""

from __future__ import annotations

import json
from types import TracebackType
from typing import Self, TextIO

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    SpinnerColumn,
    TextColumn,
    TimeElapsedColumn,
)

from streambasis.monitor import Event
from streambasis.times import NANOSECONDS
from streambasis.watch.keyed import KeyedSummary
from streambasis.watch.reporting import Summary

MOST_NAMES = 4
"""Channels shown per event; the rest are counted."""


class Terminal:
    """Writes events as text or as JSON lines, and a progress bar where somebody looks at it.

    Parameters
    ----------
    out, err : text file
        Standard output and standard error.
    as_json : bool
        Closed events go to ``out`` as JSON lines, everything made for reading to ``err``.
    quiet : bool
        Nothing made for reading is written but warnings.
    key : str, optional
        What of an event names its feed, where there are several.

    Attributes
    ----------
    quiet : bool
        May change at any time.

    Notes
    -----
    The bar and the lines share one terminal, so there is a bar only where the lines go to a
    terminal, and none where JSON lines would run through it.
    """

    def __init__(
        self, out: TextIO, err: TextIO, *, as_json: bool, quiet: bool, key: str | None = None
    ) -> None:
        self.quiet = quiet
        self._key = key
        self._json = out if as_json else None
        self._err = err
        self._lines = err if as_json else out
        self._progress: Progress | None = None
        if not quiet and self._lines.isatty() and not (as_json and out.isatty()):
            self._progress = Progress(
                SpinnerColumn(),
                BarColumn(bar_width=None),
                MofNCompleteColumn(),
                TextColumn("samples"),
                TimeElapsedColumn(),
                console=Console(file=self._lines, highlight=False),
                transient=True,
            )
            self._task = self._progress.add_task("", total=None)

    def __enter__(self) -> Self:
        if self._progress is not None:
            self._progress.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._progress is not None:
            self._progress.stop()

    def expect(self, samples: int | None) -> None:
        """Hear how many samples are to come, where that is known."""
        if self._progress is not None:
            self._progress.update(self._task, total=samples)

    def advance(self, samples: int) -> None:
        """Move the progress bar."""
        if self._progress is not None:
            task = self._progress.tasks[0]
            # the length of a text feed is an estimate
            total = None if task.total is None else max(task.total, samples)
            self._progress.update(self._task, completed=samples, total=total)

    def opened(self, event: Event) -> None:
        """Show that an event has opened."""
        self._write(
            f"{self._title(event)} opened   {when(event, 'start')}  "
            f"{event['peak']:.1f} x limit  {carriers(event, shares=False)}"
        )

    def closed(self, event: Event) -> None:
        """Show what an event came to."""
        repeats = ""
        if event["repeats"] is not None:
            label = f" ({event['label']})" if event["label"] else ""
            repeats = f"  repeats event {event['repeats']}{label}, cosine {event['cosine']:.2f}"
        self._write(
            f"{self._title(event)} closed   {when(event, 'end')}  "
            f"peak {event['peak']:.1f} x limit  {carriers(event, shares=True)}{repeats}"
        )
        if self._json is not None:
            self._json.write(json.dumps(event, ensure_ascii=False) + "\n")
            self._json.flush()

    def adopted(self, event: Event) -> None:
        """Show that an event counts as known behaviour from now on."""
        self._write(f"{self._title(event)} adopted  it lasts: known behaviour from now on")

    def warned(self, warning: str) -> None:
        """Show what somebody must know, on standard error and as one line, quiet or not."""
        line = f"streambasis: {one_line(warning)}"
        if self._progress is not None and self._err.isatty():
            self._progress.console.print(line, markup=False, soft_wrap=True)
        else:
            self._err.write(line + "\n")
            self._err.flush()

    def noted(self, note: str) -> None:
        """Show what is good to know, on standard error and as one line, unless quiet."""
        if not self.quiet:
            self.warned(note)

    def summary(self, summary: Summary | KeyedSummary) -> None:
        """Show what the run came to."""
        if isinstance(summary, KeyedSummary):
            lines = keyed_lines(summary)
        else:
            lines = summary_lines(summary)
        for line in lines:
            self._write(line)

    def _title(self, event: Event) -> str:
        feed = "" if self._key is None else f"{one_line(event[self._key])}  "
        return f"{feed}event {event['event']}"

    def _write(self, line: str) -> None:
        if self.quiet:
            return
        if self._progress is not None:
            self._progress.console.print(line, markup=False, soft_wrap=True)
        else:
            self._lines.write(line + "\n")
            self._lines.flush()


def one_line(text: str) -> str:
    """Return a text in which nothing breaks the line or moves the cursor."""
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)


def when(event: Event, side: str) -> str:
    """Return the time, where there is one, and the sample number of a side of an event."""
    moment = event[f"{side}_time"]
    sample = f"sample {event[side]}"
    if moment is None:
        return sample
    whole, _, fraction = moment.partition(".")
    fraction = fraction.rstrip("0")
    return f"{whole}.{fraction}  {sample}" if fraction else f"{whole}  {sample}"


def carriers(event: Event, *, shares: bool) -> str:
    """Return the channels that carry an event, with the share of each if asked for."""
    names = event["channels"][:MOST_NAMES]
    part = event["contributions"]
    shown = [f"{name} {100 * part[name]:.0f} %" if shares else name for name in names]
    more = len(event["channels"]) - len(names)
    return ", ".join(shown) + (f" and {more} more" if more > 0 else "")


def keyed_lines(summary: KeyedSummary) -> list[str]:
    """Return the summary of a run over many feeds, one figure a line."""
    learning = f", {summary.learning:,} still in their baseline" if summary.learning else ""
    rate = summary.samples / max(summary.seconds, 1e-9)
    rows = [
        ("feeds", f"{summary.feeds:,}{learning}"),
        ("samples", f"{summary.samples:,}"),
        ("events", f"{summary.events:,}, {summary.repeats:,} of them repeating an earlier one, "
                   f"{summary.adopted:,} adopted as known behaviour"),
        ("speed", f"{rate:,.0f} samples per second"),
    ]  # fmt: skip
    if summary.malformed:
        rows.insert(2, ("malformed", f"{summary.malformed:,} rows passed over"))
    return ["", *(f"{name:<15}{text}" for name, text in rows)]


def summary_lines(summary: Summary) -> list[str]:
    """Return the summary, one figure a line."""
    span = ""
    if summary.first_time is not None and summary.last_time is not None:
        span = f" over {_span(summary.last_time - summary.first_time)}"
    now = f", {summary.samples:,} of them since it went on" if summary.before else ""
    events = str(summary.events)
    if summary.repeats:
        events += f", {summary.repeats} of them repeating an earlier one"
    if summary.adopted:
        events += f", {summary.adopted} adopted as known behaviour"
    rate = summary.samples / max(summary.seconds, 1e-9)
    rows = [
        ("samples", f"{summary.before + summary.samples:,}{span}{now}"),
        ("rank", f"{summary.rank} directions"),
        ("noise floor", f"{summary.noise:.3g} (variance per residual dimension, scaled channels)"),
        ("drift", f"{summary.drift:.3g} rad since the baseline"),
        ("events", events),
        ("speed", f"{rate:,.0f} samples per second"),
        ("orthogonality", f"defect {summary.orthogonality:.2g} (sound below 3)"),
    ]
    return ["", *(f"{name:<15}{text}" for name, text in rows)]


def _span(nanoseconds: int) -> str:
    """Return a length of time in the largest unit that leaves at least 2 of it."""
    seconds = nanoseconds / NANOSECONDS
    for unit, length in (("days", 86_400), ("h", 3600), ("min", 60)):
        if seconds >= 2 * length:
            return f"{seconds / length:.3g} {unit}"
    return f"{seconds:.3g} s"
