"""What all pictures share: size, type, colours, the horizontal axis, text that outsiders wrote.

Colours are told apart by readers with colour-vision deficiencies and, by lightness, in grey; no
meaning hangs on colour alone.
"""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cache
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib import font_manager
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import (
    FuncFormatter,
    LogLocator,
    MaxNLocator,
    NullLocator,
    StrMethodFormatter,
)
from numpy.typing import NDArray

from streambasis.report.dates import DAY, SECOND, date_ticks
from streambasis.report.thinning import NO_TIME, Envelope

WIDTH = 11.0
"""Width of a picture in inches."""

DPI = 144
COLUMNS = 1400
"""Columns of a long series: about one for each dot across the picture."""

INK, MUTED, GRID = "#1a1a1a", "#5a5a5a", "#d9d9d9"
ORDINARY, BEYOND, SHADE = "#6f9fc4", "#a33000", "#ecdfc6"
LINES = ("-", "--", ":", "-.")

EARLIEST_DATE = 365 * DAY
"""Times before 1971 are numbers of seconds, where the run does not say what its times are."""

GAP = 12.0
"""A step this many times the usual one is a gap in the feed, left open."""

_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.titlesize": 10.0,
    "axes.labelsize": 9.0,
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "grid.color": GRID,
    "grid.linewidth": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "hatch.linewidth": 0.5,
    "text.usetex": False,
}


@contextmanager
def style() -> Iterator[None]:
    """Draw with our own settings, whatever the user has set for matplotlib."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_STYLE)
        yield


def blank(height: float, width: float = WIDTH) -> Figure:
    """Return an empty picture, sizes in inches."""
    figure = Figure(figsize=(width, height), dpi=DPI, layout="constrained", facecolor="white")
    FigureCanvasAgg(figure)
    return figure


@dataclass(frozen=True, slots=True)
class Course:
    """The horizontal axis that all pictures over the run share.

    Attributes
    ----------
    samples, x : ndarray of float64, shape (columns,)
        Sample numbers in the middle of the columns of an envelope, and where they are drawn.
    name : str
        What the axis shows, with its unit.
    origin : int or None
        The time, in nanoseconds since 1970, from which x counts seconds, shown as dates; None
        where x is shown as the number it is.
    """

    samples: NDArray[np.float64]
    x: NDArray[np.float64]
    name: str
    origin: int | None

    def at(self, samples: Any) -> NDArray[np.float64]:
        """Return where samples, by number, are drawn."""
        return np.asarray(np.interp(samples, self.samples, self.x))

    @property
    def span(self) -> tuple[float, float]:
        """The ends of the axis."""
        first, last = float(self.x[0]), float(self.x[-1])
        return (first, last) if last > first else (first - 0.5, first + 0.5)

    def broken(
        self, x: NDArray[np.float64], *series: NDArray[np.float64]
    ) -> list[NDArray[np.float64]]:
        """Return positions and series with a NaN wherever the feed had a gap in time."""
        steps = np.diff(x)
        if not steps.size:
            return [x, *series]
        first, last = self.span
        wide = (steps > GAP * np.median(steps)) & (steps > 0.005 * (last - first))
        at = np.flatnonzero(wide) + 1
        return [np.insert(x, at, x[at]), *(np.insert(one, at, np.nan) for one in series)]

    def dress(self, axes: Axes, *, named: bool = True) -> None:
        """Give a picture this axis."""
        axes.set_xlim(*self.span)
        axes.grid(axis="y")
        if self.origin is not None:
            first, last = (self.origin + round(end * SECOND) for end in self.span)
            moments, labels = date_ticks(first, last)
            axes.set_xticks([(moment - self.origin) / SECOND for moment in moments], labels)
        else:
            axes.xaxis.set_major_locator(MaxNLocator(8, integer=self.name.startswith("sample")))
            axes.xaxis.set_major_formatter(StrMethodFormatter("{x:,.10g}"))
        if named:
            axes.set_xlabel(self.name)


def course(envelope: Envelope, clock: str | None) -> Course:
    """Choose the horizontal axis: the times of the feed where all samples have them, in order.

    Parameters
    ----------
    envelope : Envelope
        The columns to place.
    clock : {"timestamps", "seconds"} or None
        What the times of the feed are; told by their size where nobody says.
    """
    samples = envelope.samples
    there = envelope.begin != NO_TIME
    begin, end = envelope.begin[there], envelope.end[there]
    ordered = np.all(np.diff(begin) > 0) and np.all(end >= begin)
    if not there.any() or (envelope.columns > 1 and not (ordered and begin[-1] > begin[0])):
        return Course(samples, samples, "sample (number)", None)
    middle = begin + (end - begin) // 2
    if dated(envelope, clock):
        origin = int(begin[0])
        ends = (str(np.datetime64(int(t), "ns"))[:19].replace("T", " ") for t in (origin, end[-1]))
        name = f"time (dates of the feed, {' to '.join(ends)})"
        x = (middle - origin) / SECOND
    else:
        origin = None
        unit, length = _unit(float(end[-1] - begin[0]) / SECOND)
        name, x = f"time ({unit})", middle / SECOND / length
    return Course(samples, np.interp(samples, samples[there], x), name, origin)


def dated(envelope: Envelope, clock: str | None) -> bool:
    """Return whether the times of a feed are dates, told by their size where nobody says."""
    if clock is not None:
        return clock == "timestamps"
    there = envelope.begin != NO_TIME
    return bool(there.any()) and int(envelope.begin[there][0]) >= EARLIEST_DATE


def _unit(seconds: float) -> tuple[str, float]:
    for unit, length in (("d", 86_400.0), ("h", 3600.0), ("min", 60.0), ("s", 1.0)):
        if seconds >= 3 * length:
            return unit, length
    return ("ms", 1e-3) if seconds >= 3e-3 else ("µs", 1e-6)


def logarithmic(axes: Axes, low: float, high: float) -> None:
    """Give a picture a logarithmic vertical axis whose ticks are all numbered."""
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    decades = math.log10(high / low)
    subs = (1.0, 2.0, 5.0) if decades < 2.6 else (1.0, 3.0) if decades < 4.0 else (1.0,)
    axes.yaxis.set_major_locator(LogLocator(subs=subs, numticks=12))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: _number(value)))


def _number(value: float) -> str:
    if 1e-3 <= value < 1e6:
        return f"{value:,.6g}"
    digits, _, power = f"{value:.0e}".partition("e")
    return f"{digits}e{int(power)}"


@cache
def _glyphs() -> frozenset[int]:
    path = font_manager.findfont("DejaVu Sans")
    return frozenset(font_manager.get_font(path).get_charmap())


def legible(text: str, most: int = 26) -> str:
    """Return text from outside as one short line that the font can draw.

    Examples
    --------
    >>> from streambasis.report.canvas import legible
    >>> legible("bearing temperature, drive end, inner race")
    'bearing tempera…inner race'
    """
    line = " ".join(text.split())
    drawn = "".join(
        "□" if ord(c) not in _glyphs() or unicodedata.category(c)[0] == "C" else c for c in line
    )
    if len(drawn) <= most:
        return drawn
    tail = (most - 1) * 2 // 5
    return f"{drawn[: most - 1 - tail].rstrip()}…{drawn[-tail:].lstrip()}"


def spaced(positions: Sequence[float], least: float, low: float, high: float) -> list[float]:
    """Move positions apart to ``least`` as little as that takes, in order, within two ends.

    Examples
    --------
    >>> from streambasis.report.canvas import spaced
    >>> spaced([0.50, 0.51, 0.90], 0.1, 0.0, 1.0)
    [0.455, 0.555, 0.9]
    """
    if not positions:
        return []
    least = min(least, (high - low) / max(len(positions) - 1, 1))
    order = np.argsort(positions, kind="stable")
    # with the spacing taken off, the nearest positions in order are an isotonic regression,
    # solved by pooling neighbours that are out of order
    groups: list[tuple[float, int]] = []
    for rank, index in enumerate(order.tolist()):
        value, size = float(positions[index]) - least * rank, 1
        while groups and groups[-1][0] > value:
            before, count = groups.pop()
            value = (before * count + value * size) / (count + size)
            size += count
        groups.append((value, size))
    top = high - least * (len(positions) - 1)
    level = [min(max(value, low), top) for value, size in groups for _ in range(size)]
    out = [0.0] * len(positions)
    for rank, index in enumerate(order.tolist()):
        out[index] = round(level[rank] + least * rank, 12)
    return out
