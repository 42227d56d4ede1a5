"""Pictures over the run: scores against their limits, rank, noise floor, energies, drift."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from streambasis.report.canvas import (
    BEYOND,
    INK,
    LINES,
    MUTED,
    ORDINARY,
    SHADE,
    Course,
    blank,
    logarithmic,
    spaced,
)
from streambasis.report.reading import KeptRun

DRAWN_ENERGIES = 8
DEEPEST = 1e-9
"""Where an axis of energies ends, as a part of the largest: the noise floor may be zero."""

FEW = 60
"""Readings up to this many are marked one by one."""

NUMBER_WIDTH = 0.0065
"""Width of a digit over an event, as a part of the axis."""


class Score(NamedTuple):
    """A score to draw: its series, its limit's, the one that says what is beyond, its name."""

    series: str
    limit: str
    beyond: str
    name: str
    unit: str


SPE = Score("spe", "limit", "novel", "SPE", "squared noise standard deviations")
T2 = Score("t2", "t2_limit", "extreme", "T²", "squared standard deviations")


def scores(run: KeptRun, course: Course, score: Score) -> Figure:
    """Draw a score against its limit, with the events shaded and numbered."""
    figure = blank(3.9)
    strip, axes = figure.subplots(2, 1, sharex=True, height_ratios=[1, 14])
    least, most = run.envelope.low, run.envelope.high
    x, low, high, bound_low, bound, beyond = course.broken(
        course.x,
        least[score.series],
        most[score.series],
        least[score.limit],
        most[score.limit],
        most[score.beyond],
    )
    # a limit fitted to too few samples for its rank is infinite: none
    bound_low, bound = (np.where(np.isinf(one), np.nan, one) for one in (bound_low, bound))
    floor = _floor(low, high, bound)
    low, high = np.maximum(low, floor), np.maximum(high, floor)
    _shade(axes, run, course)
    axes.fill_between(
        x, low, high, color=ORDINARY, linewidth=0.8, label=f"{score.name}, lowest to highest"
    )
    _draw_beyond(axes, x, (low, high), bound_low, beyond > 0)
    axes.plot(x, bound, color=INK, linestyle="--", linewidth=1.1, label="control limit")
    top = float(np.fmax(np.nanmax(high), np.fmax.reduce(bound)))
    logarithmic(axes, floor, top * (top / floor) ** 0.06)
    axes.set_ylabel(f"{score.name}\n({score.unit})")
    course.dress(axes)
    _baseline(axes, run, course)
    _number_events(strip, run, course)
    axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.2), ncols=5)
    return figure


def _draw_beyond(
    axes: Axes,
    x: NDArray[np.float64],
    scores: tuple[NDArray[np.float64], NDArray[np.float64]],
    bound: NDArray[np.float64],
    above: NDArray[np.bool_],
) -> None:
    """Draw what lies beyond the limit over the rest, in the columns that hold such samples."""
    if not above.any():
        return
    low, high = np.fmax(scores[0], bound), scores[1]
    axes.fill_between(
        x, low, high, where=above, color=BEYOND, linewidth=0.8, label="beyond the limit"
    )
    # a polygon needs two columns; one alone is a line up from the limit
    neighbours = np.pad(above, 1)
    alone = above & ~neighbours[:-2] & ~neighbours[2:]
    axes.vlines(x[alone], bound[alone], high[alone], color=BEYOND, linewidth=0.9)


def _floor(
    low: NDArray[np.float64], high: NDArray[np.float64], bound: NDArray[np.float64]
) -> float:
    """Return the lower end of a logarithmic axis: what lies below says nothing."""
    limits = bound[np.isfinite(bound)]
    limit = float(np.median(limits)) if limits.size else float(np.nanmax(high))
    positive = low[low > 0]
    least = float(np.nanmin(positive)) if positive.size else limit
    return min(max(least * 0.8, limit * 1e-3), limit * 0.5)


def _spans(run: KeptRun) -> list[tuple[int, int, int, float]]:
    """Return number, first and last sample, and peak of every event; open ones come last."""
    closed = [(e.event, e.start, e.end, e.peak) for e in run.events]
    return closed + [(n, *span, math.inf) for n, span in run.unclosed.items()]


def _shade(axes: Axes, run: KeptRun, course: Course) -> None:
    spans = _spans(run)
    if not spans:
        return
    first, last = course.span
    least = (last - first) / 1200
    starts = course.at([s for _, s, _, _ in spans])
    ends = course.at([e for _, _, e, _ in spans])
    middle, half = (starts + ends) / 2, np.maximum(ends - starts, least) / 2
    axes.broken_barh(
        list(zip(middle - half, 2 * half, strict=True)),
        (0, 1),
        transform=axes.get_xaxis_transform(),
        facecolor=SHADE,
        edgecolor="none",
        zorder=0.5,
        label="event",
    )


def _number_events(strip: Axes, run: KeptRun, course: Course) -> None:
    """Mark the events above the picture, numbered as far as the numbers fit, strongest first."""
    strip.set_axis_off()
    strip.set_ylim(0, 1)
    first, last = course.span
    spans = sorted(_spans(run), key=lambda span: -span[3])
    if spans:
        starts, ends = (course.at([span[side] for span in spans]) for side in (1, 2))
        least = (last - first) / 1200
        strip.hlines(np.zeros(len(spans)), starts, np.maximum(ends, starts + least), color=BEYOND,
                     linewidth=2.2)  # fmt: skip
    taken: list[tuple[float, float]] = []
    for number, start, end, _ in spans:
        x0, x1 = course.at([start, end]).tolist()
        middle = ((x0 + x1) / 2 - first) / (last - first)
        half = NUMBER_WIDTH * (len(str(number)) + 1) / 2
        middle = min(max(middle, half), 1 - half)
        if all(middle + half <= a or middle - half >= b for a, b in taken):
            taken.append((middle - half, middle + half))
            strip.text(
                middle, 0.35, str(number), transform=strip.transAxes, ha="center", va="bottom",
                fontsize=8, color=INK,
            )  # fmt: skip


def _baseline(axes: Axes, run: KeptRun, course: Course) -> None:
    """Hatch what has no score because it is the baseline."""
    judged = run.first_judged
    if judged is None or judged <= run.envelope.first:
        return
    start, stop = course.at([run.envelope.first, judged]).tolist()
    axes.axvspan(
        start, stop, facecolor="none", edgecolor=MUTED, hatch="///", linewidth=0, alpha=0.55,
        label="baseline", zorder=0.4,
    )  # fmt: skip


def rank_and_noise(run: KeptRun, course: Course) -> Figure:
    """Draw how many directions are active, and how much is left outside them."""
    progress = run.progress
    figure = blank(4.4 if progress is not None else 2.6)
    panels = figure.subplots(1 if progress is None else 2, 1, sharex=True, squeeze=False)[:, 0]
    axes = panels[0]
    low, high = run.envelope.low["rank"], run.envelope.high["rank"]
    x, low, high = course.broken(course.x, low, high)
    axes.fill_between(x, low, high, step="mid", color=ORDINARY, linewidth=0)
    axes.step(x, high, where="mid", color=INK, linewidth=1.3, label="basis", clip_on=False)
    top = float(np.nanmax(high))
    if progress is not None and progress.known.max(initial=0) > 0:
        at = course.at(progress.sample)
        axes.step(at, progress.known, where="post", color=BEYOND, ls="--", lw=1.3, clip_on=False,
                  label="adopted as known behaviour")  # fmt: skip
        axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=2, borderpad=0)
        top = max(top, float(progress.known.max()))
    axes.set_ylim(0, max(1.15 * top + 0.5, 1.5))
    axes.yaxis.set_major_locator(MaxNLocator(5, integer=True))
    axes.set_ylabel("rank\n(directions)")
    course.dress(axes, named=progress is None)
    if progress is not None:
        axes = panels[1]
        axes.axhline(1.0, color=MUTED, ls=":", lw=1.1)
        _readings(axes, run, course, progress.noise, INK)
        _room(axes, np.append(progress.noise, 1.0))
        axes.set_ylabel("noise floor\n(1 = noise of the baseline)")
        course.dress(axes)
    return figure


def drift(run: KeptRun, course: Course) -> Figure:
    """Draw the angle between today's subspace and the baseline's."""
    assert run.progress is not None
    figure = blank(2.8)
    axes = figure.subplots()
    _readings(axes, run, course, run.progress.drift, INK)
    axes.set_ylim(0, max(1.12 * float(np.nanmax(run.progress.drift)), 1e-3))
    axes.set_ylabel("drift angle (radians)")
    course.dress(axes)
    degrees = axes.secondary_yaxis("right", functions=(np.degrees, np.radians))
    degrees.set_ylabel("(degrees)")
    return figure


def energies(run: KeptRun, course: Course) -> Figure:
    """Draw the variance along the leading directions, with the noise floor below them."""
    assert run.progress is not None
    progress = run.progress
    shown = [
        k for k in range(min(progress.energies.shape[1], DRAWN_ENERGIES))
        if np.isfinite(progress.energies[:, k]).any()
    ]  # fmt: skip
    figure = blank(3.7)
    axes = figure.subplots()
    tones = colormaps["cividis"](np.linspace(0.0, 0.75, max(len(shown), 2)))
    named: list[tuple[float, str, object]] = []
    for k in shown:
        values = progress.energies[:, k]
        _readings(axes, run, course, values, tones[k], LINES[k % len(LINES)])
        named.append((float(values[np.isfinite(values)][-1]), f"direction {k}", tones[k]))
    if np.isfinite(progress.noise).any():
        _readings(axes, run, course, progress.noise, MUTED, (0, (1, 1)))
        last = float(progress.noise[np.isfinite(progress.noise)][-1])
        named.append((last, "noise floor", MUTED))
    there = np.append(progress.energies[:, shown].ravel(), progress.noise)
    there = there[np.isfinite(there) & (there > 0)]
    top = float(there.max(initial=1e-300))
    logarithmic(axes, max(float(there.min(initial=top)), top * DEEPEST) / 1.4, top * 1.4)
    axes.set_ylabel("energy: variance along a direction\n(1 = noise of the baseline)")
    course.dress(axes)
    low, high = np.log(axes.get_ylim())
    at = [(math.log(max(value, 1e-300)) - low) / (high - low) for value, _, _ in named]
    heights = spaced(at, 0.062, 0.0, 1.0)
    for height, there, (_, text, tone) in zip(heights, at, named, strict=True):
        axes.annotate(
            text, (1.0, there), (1.025, height), xycoords="axes fraction",
            textcoords="axes fraction", va="center", fontsize=8.5, color=INK,
            arrowprops={"arrowstyle": "-", "color": tone, "lw": 0.9, "shrinkA": 1, "shrinkB": 1,
                        "relpos": (0.0, 0.5)},
        )  # fmt: skip
    return figure


def _readings(
    axes: Axes,
    run: KeptRun,
    course: Course,
    values: NDArray[np.float64],
    color: object,
    line: object = "-",
) -> None:
    assert run.progress is not None
    marker = "o" if len(values) <= FEW else ""
    x, broken = course.broken(course.at(run.progress.sample), values)
    axes.plot(x, broken, color=color, linestyle=line, linewidth=1.4, marker=marker, markersize=3,
              clip_on=False)  # fmt: skip


def _room(axes: Axes, values: NDArray[np.float64]) -> None:
    """Leave room above and below values that may not move at all."""
    there = values[np.isfinite(values)]
    low, high = float(there.min()), float(there.max())
    margin = max(0.1 * (high - low), 0.02 * abs(high))
    axes.set_ylim(low - margin, high + margin)
