"""Which pictures a report has, what is said beside each, and what is said where one is missing."""

from __future__ import annotations

import io
import struct
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from matplotlib.figure import Figure

from streambasis.report import courses, tables
from streambasis.report.canvas import Course, course, style
from streambasis.report.reading import KeptRun

NO_READINGS = (
    "The folder holds no readings of the basis (progress.arrow): the run was kept by a version "
    "that wrote none, or had not passed its baseline."
)


NO_DIRECTION = "The basis has no direction: the channels of this feed have nothing in common."


@dataclass(frozen=True, slots=True)
class Picture:
    """One picture, or the reason why there is none.

    Attributes
    ----------
    name : str
        Name of its file, without an ending.
    title, text : str
        What it shows and how to read it; or, without a picture, why it is missing.
    png : bytes or None
        The picture.
    """

    name: str
    title: str
    text: str
    png: bytes | None

    @property
    def size(self) -> tuple[int, int]:
        """Width and height in dots."""
        if self.png is None:
            return 0, 0
        # the header of a PNG file comes first and holds both
        width, height = struct.unpack(">II", self.png[16:24])
        return int(width), int(height)


def pictures(run: KeptRun) -> Iterator[Picture]:
    """Draw the pictures of a report, one after the other."""
    axis = course(run.envelope, run.about.get("clock"))
    for make in (_spe, _t2, _rank, _energies, _drift, _contributions, _cosines):
        yield make(run, axis)


def _drawn(name: str, title: str, text: str, draw: Callable[[], Figure]) -> Picture:
    held = io.BytesIO()
    with style():
        draw().savefig(held, format="png", metadata={"Software": None})
    return Picture(name, title, text, held.getvalue())


def _unjudged(run: KeptRun) -> str | None:
    if run.counts["judged"]:
        return None
    return (
        f"None of the {run.counts['samples']:,} samples kept has a score: the run had not passed "
        "its baseline."
    )


def _density(run: KeptRun) -> str:
    per_column = run.envelope.count / run.envelope.columns
    if per_column == 1:
        return "Every sample is drawn."
    return (
        f"Each of the {run.envelope.columns:,} columns spans the lowest and the highest value of "
        f"about {per_column:,.0f} samples, so that no peak is lost."
    )


def _spe(run: KeptRun, axis: Course) -> Picture:
    name, title = "spe", "Squared prediction error (SPE) against its control limit"
    reason = _unjudged(run)
    if reason:
        return Picture(name, title, reason, None)
    text = (
        "How much of each sample the basis does not explain. Events are shaded and numbered as far "
        f"as there is room, the strongest first. {_density(run)}"
    )
    return _drawn(name, title, text, lambda: courses.scores(run, axis, courses.SPE))


def _t2(run: KeptRun, axis: Course) -> Picture:
    name, title = "t2", "Hotelling's T² against its control limit"
    reason = _unjudged(run)
    if reason:
        return Picture(name, title, reason, None)
    if not np.nanmax(run.envelope.high["rank"]) > 0:
        return Picture(name, title, f"{NO_DIRECTION} T² is zero throughout.", None)
    text = f"How far out each sample lies within known directions. {_density(run)}"
    return _drawn(name, title, text, lambda: courses.scores(run, axis, courses.T2))


def _rank(run: KeptRun, axis: Course) -> Picture:
    name, title = "rank-noise", "Rank and noise floor"
    reason = _unjudged(run)
    if reason:
        return Picture(name, title, reason, None)
    text = "Independent directions of the basis, and of behaviour adopted since"
    if _has_readings(run):
        text += (
            "; below, the variance per dimension outside them: 1 means that noise is what the "
            "baseline said it was."
        )
    else:
        text = f"Independent directions of the basis. The noise floor is missing. {NO_READINGS}"
    return _drawn(name, title, text, lambda: courses.rank_and_noise(run, axis))


def _has_readings(run: KeptRun) -> bool:
    return run.progress is not None and len(run.progress.sample) > 0


def _energies(run: KeptRun, axis: Course) -> Picture:
    name, title = "energies", "Energies"
    if not _has_readings(run):
        return Picture(name, title, NO_READINGS, None)
    assert run.progress is not None
    if not np.isfinite(run.progress.energies).any():
        return Picture(name, title, NO_DIRECTION, None)
    text = (
        f"Variance along the leading directions (at most {courses.DRAWN_ENERGIES}), largest first, "
        "above the noise floor."
    )
    return _drawn(name, title, text, lambda: courses.energies(run, axis))


def _drift(run: KeptRun, axis: Course) -> Picture:
    name, title = "drift", "Drift angle"
    if not _has_readings(run):
        return Picture(name, title, NO_READINGS, None)
    assert run.progress is not None
    if not np.isfinite(run.progress.energies).any():
        return Picture(name, title, NO_DIRECTION, None)
    text = "Largest principal angle between the subspace of the baseline and that of the moment."
    return _drawn(name, title, text, lambda: courses.drift(run, axis))


def _picked(run: KeptRun, shown: int) -> str:
    total = len(run.events)
    return "" if shown == total else f" The {shown} strongest of {total:,} events are shown."


def _contributions(run: KeptRun, axis: Course) -> Picture:
    del axis
    name, title = "contributions", "Channels that carry each event"
    if not run.events:
        return Picture(name, title, "No event has closed in this run.", None)
    shown = tables.shares(run)
    if not shown.channels:
        return Picture(name, title, "The events name no channel.", None)
    text = "Share of each channel in each event; the darker, the more." + _picked(
        run, len(shown.events)
    )
    if shown.left_out:
        text += f" {shown.left_out:,} channels whose largest share is smaller are left out."
    return _drawn(name, title, text, lambda: tables.contributions(shown))


def _cosines(run: KeptRun, axis: Course) -> Picture:
    del axis
    name, title = "cosines", "Likeness of events"
    if not run.events:
        return Picture(name, title, "No event has closed in this run.", None)
    events, table = tables.cosines(run)
    if not events:
        reason = (
            "The directions of the events are in the snapshot (state.arrow), and this folder "
            "holds none that can be read with these events in it."
        )
        return Picture(name, title, reason, None)
    if len(events) == 1:
        return Picture(name, title, "There is one event, and none to compare it with.", None)
    text = (
        "Cosine of the angle between the directions of two events: 1 is the same pattern over the "
        "channels, 0 none in common. A frame marks an event that was recognised as a repetition."
        + _picked(run, len(events))
    )
    return _drawn(name, title, text, lambda: tables.alike(events, table))
