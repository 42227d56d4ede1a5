"""Pictures of the events themselves: which channels carry them, and which are alike."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.image import AxesImage
from matplotlib.patches import Rectangle
from numpy.typing import NDArray

from streambasis.report.canvas import INK, WIDTH, blank, legible
from streambasis.report.reading import EventRow, KeptRun

MOST_CHANNELS = 40
"""Channels drawn: more would not be legible."""

LEAST_SHARE = 0.005
"""Of so many channels that not all are drawn, those that carry less stay out: rounded, 0 %."""

WRITTEN = 16
"""Up to this many columns the cells also hold their number."""

ROW = 0.21
"""Height of a row in inches."""

FRAME = "#ffb04d"
"""Light, as a repetition is a dark cell."""

_MAP = LinearSegmentedColormap.from_list("shares", ["#f5f3ee", "#a9c3d9", "#4b7fab", "#0b2c55"])
"""From light to dark, evenly: also a scale in grey, and little ink where there is nothing."""


@dataclass(frozen=True, slots=True)
class Shares:
    """The shares of the channels that carry most of the strongest events.

    Attributes
    ----------
    channels : list of str
        In the order of the feed.
    events : list of EventRow
        The strongest, by number.
    values : ndarray of float64, shape (channels, events)
        From 0 to 1.
    left_out : int
        Channels that carry less and are not shown.
    """

    channels: list[str]
    events: list[EventRow]
    values: NDArray[np.float64]
    left_out: int


def shares(run: KeptRun) -> Shares:
    """Choose the channels with the largest share in any of the strongest events."""
    events, channels = run.strongest, run.channels
    values = np.array([[run.shares[e.event].get(c, 0.0) for e in events] for c in channels])
    values = values.reshape(len(channels), len(events))
    largest = values.max(axis=1, initial=0.0)
    kept = np.arange(len(channels))
    if len(channels) > MOST_CHANNELS:
        order = np.argsort(-largest, kind="stable")[:MOST_CHANNELS]
        kept = np.sort(order[largest[order] >= LEAST_SHARE])
    return Shares([channels[i] for i in kept], events, values[kept], len(channels) - len(kept))


def contributions(shown: Shares) -> Figure:
    """Draw the share of each channel in each event as a heat map."""
    rows, columns = shown.values.shape
    figure = blank(1.5 + ROW * rows, min(WIDTH, 4.6 + 0.42 * columns))
    axes = figure.subplots()
    image = axes.imshow(
        100 * shown.values, cmap=_MAP, vmin=0, vmax=100, aspect="auto", interpolation="nearest"
    )
    _cells(axes, rows, columns)
    axes.set_yticks(range(rows), [legible(name) for name in shown.channels], parse_math=False)
    _event_ticks(axes, shown.events)
    axes.set_ylabel("channel")
    if columns <= WRITTEN:
        for (i, j), value in np.ndenumerate(shown.values):
            if value >= 0.01:
                _write(axes, j, i, f"{100 * value:.0f}", value)
    _bar(figure, axes, image, "contribution\n(% of the event)")
    return figure


def cosines(run: KeptRun) -> tuple[list[EventRow], NDArray[np.float64]]:
    """Return the strongest events with a known direction, and the cosines between them."""
    events = [event for event in run.strongest if event.event in run.directions]
    rows = np.array([run.directions[event.event] for event in events])
    return events, np.minimum(np.abs(rows @ rows.T), 1.0) if events else np.zeros((0, 0))


def alike(events: list[EventRow], table: NDArray[np.float64]) -> Figure:
    """Draw the cosines between the directions of events; what repeats is framed."""
    count = len(events)
    side = max(2.6, 0.36 * count if count <= WRITTEN else 0.22 * count)
    figure = blank(side + 1.1, side + 2.2)
    axes = figure.subplots()
    hidden = np.triu(np.ones((count, count), np.bool_), 1)
    image = axes.imshow(
        np.ma.masked_array(table, hidden), cmap=_MAP, vmin=0, vmax=1, interpolation="nearest"
    )
    _cells(axes, count, count)
    _event_ticks(axes, events)
    axes.set_yticks(range(count), [str(event.event) for event in events])
    axes.set_ylabel("event (number)")
    place = {event.event: i for i, event in enumerate(events)}
    for i, event in enumerate(events):
        if count <= WRITTEN:
            for j in range(i + 1):
                _write(axes, j, i, f"{table[i, j]:.2f}", table[i, j])
        j = place.get(-1 if event.repeats is None else event.repeats, -1)
        if j >= 0:
            corner = min(j, i) - 0.4, max(j, i) - 0.4
            axes.add_patch(Rectangle(corner, 0.8, 0.8, fill=False, edgecolor=FRAME, linewidth=2.0))
    _bar(figure, axes, image, "cosine between directions")
    return figure


def _event_ticks(axes: Axes, events: list[EventRow]) -> None:
    axes.set_xticks(range(len(events)), [str(event.event) for event in events])
    if any(event.event > 99 for event in events) and len(events) > WRITTEN:
        axes.tick_params(axis="x", rotation=90)
    axes.set_xlabel("event (number)")


def _cells(axes: Axes, rows: int, columns: int) -> None:
    """Separate the cells by white lines."""
    axes.set_xticks(np.arange(columns + 1) - 0.5, minor=True)
    axes.set_yticks(np.arange(rows + 1) - 0.5, minor=True)
    axes.grid(which="minor", color="white", linewidth=1.0)
    axes.tick_params(which="both", length=0)
    axes.spines[:].set_visible(False)


def _write(axes: Axes, x: int, y: int, text: str, value: float) -> None:
    red, green, blue, _ = _MAP(float(value))
    light = 0.2126 * red + 0.7152 * green + 0.0722 * blue > 0.45
    axes.text(x, y, text, ha="center", va="center", fontsize=8, color=INK if light else "white")


def _bar(figure: Figure, axes: Axes, image: AxesImage, name: str) -> None:
    bar = figure.colorbar(image, ax=axes, pad=0.02, aspect=25, shrink=0.9)
    bar.outline.set_visible(False)
    bar.set_label(name)
