"""The report as one HTML page that needs nothing from anywhere else."""

from __future__ import annotations

import base64
import datetime as dt
import unicodedata
from collections.abc import Iterable, Sequence
from xml.etree import ElementTree as ET

import numpy as np

from streambasis._version import __version__
from streambasis.report.canvas import DPI, dated
from streambasis.report.dates import SECOND
from streambasis.report.pictures import Picture
from streambasis.report.reading import EventRow, KeptRun
from streambasis.report.thinning import NO_TIME

MOST_LISTED = 500
"""Events in the table; all of them are in events.jsonl."""

MOST_NAMES = 6
_HEADS = (
    ("event", "number"), ("start", "whole"), ("end", "whole"), ("first sample", "number"),
    ("last sample", "number"), ("peak × limit", "number"), ("channels", ""), ("repeats", ""),
    ("label", ""),
)  # fmt: skip
"""Of the table of events: what stands above each column, and how it is set."""

_TURNING = {*range(0x202A, 0x202F), *range(0x2066, 0x206A), 0x200E, 0x200F, 0x061C}
"""Characters that turn the direction of the text after them."""

_POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"
_LOOK = """
body { font: 15px/1.5 system-ui, sans-serif; color: #1a1a1a; background: #fff;
       max-width: 1120px; margin: 2em auto; padding: 0 1.2em; }
h1 { font-size: 1.6em; margin: 0 0 .3em; }
h2 { font-size: 1.15em; margin: 2.2em 0 .4em; }
p { max-width: 46em; margin: .4em 0 .8em; }
.caution { border-left: 4px solid #a33000; padding: .2em 0 .2em 1em; }
.missing { font-style: italic; color: #444; }
img { display: block; max-width: 100%; height: auto; }
table { border-collapse: collapse; font-variant-numeric: tabular-nums; }
th, td { text-align: left; vertical-align: top; padding: .25em .9em .25em 0;
         border-bottom: 1px solid #ddd; }
td { overflow-wrap: anywhere; }
th { font-weight: 600; }
thead th { border-bottom: 2px solid #888; vertical-align: bottom; }
.number { text-align: right; }
.number, .whole { white-space: nowrap; overflow-wrap: normal; }
@page { margin: 14mm; }
@media print {
  body { font-size: 9.5pt; margin: 0; max-width: none; padding: 0; }
  table.events { font-size: 7.5pt; }
  section.picture, tr { break-inside: avoid; }
  h2 { break-after: avoid; }
  thead { display: table-header-group; }
}
"""


def page(run: KeptRun, shown: Iterable[Picture], caution: str, made: dt.datetime) -> bytes:
    """Put a report on a page.

    Parameters
    ----------
    run : KeptRun
        The run.
    shown : iterable of Picture
        Its pictures.
    caution : str
        What the product is not.
    made : datetime
        When the report was made.

    Returns
    -------
    bytes
        HTML in UTF-8. Whatever comes from the feed is text in it, never markup: the page is built
        as a tree and written out by the standard library, and a policy in its head forbids
        scripts and the network.
    """
    html = ET.Element("html", lang="en")
    head = ET.SubElement(html, "head")
    ET.SubElement(head, "meta", charset="utf-8")
    ET.SubElement(head, "meta", {"http-equiv": "Content-Security-Policy", "content": _POLICY})
    ET.SubElement(head, "meta", name="viewport", content="width=device-width")
    title = f"Report on {run.about.get('feed') or run.home.name}"
    _add(head, "title", title)
    _add(head, "style", _LOOK)
    body = ET.SubElement(html, "body")
    _add(body, "h1", title)
    _add(body, "p", caution).set("class", "caution")
    _pairs(body, provenance(run, made))
    for note in run.notes:
        _add(body, "p", note).set("class", "missing")
    for picture in shown:
        _picture(body, picture)
    _events(body, run)
    text = ET.tostring(html, encoding="unicode", method="html")
    return f"<!DOCTYPE html>\n{text}\n".encode()


def provenance(run: KeptRun, made: dt.datetime) -> list[tuple[str, str]]:
    """Return where the report comes from, one name and one text each."""
    envelope, counts, facts = run.envelope, run.counts, run.facts
    rows = [
        ("made", f"{made:%Y-%m-%d %H:%M:%S %Z} by streambasis {__version__}"),
        ("folder", str(run.home.absolute())),
        ("feed", str(run.about.get("feed") or "not kept in this folder")),
        ("channels", f"{len(run.channels):,}" if run.channels else "not kept in this folder"),
    ]
    samples = f"{counts['samples']:,}"
    if counts["samples"]:
        last = envelope.first + envelope.count - 1
        samples += f" (numbers {envelope.first:,} to {last:,})"
    rows.append(("samples", samples))
    there = envelope.begin != NO_TIME
    if there.any():
        dates = dated(envelope, run.about.get("clock"))
        ends = (envelope.begin[there][0], envelope.end[there][-1])
        texts = (_moment(str(np.datetime64(int(t), "ns")), dates) for t in ends)
        rows.append(("dates" if dates else "time", " to ".join(texts)))
    judged = max(counts["judged"], 1)
    rows.append(("judged", f"{counts['judged']:,}"))
    for name, what in (("novel", "SPE"), ("extreme", "T²")):
        text = f"{counts[name]:,} ({100 * counts[name] / judged:.3g} % of those judged)"
        rows.append((f"{name} ({what} beyond its limit)", text))
    repeated = sum(event.repeats is not None for event in run.events)
    events = f"{len(run.events):,}, {repeated:,} of them repeating an earlier one"
    rows.append(
        ("events", events + (f", {len(run.unclosed):,} not closed" if run.unclosed else ""))
    )
    return rows + _settings(run, facts)


def _settings(run: KeptRun, facts: dict[str, object]) -> list[tuple[str, str]]:
    if not facts:
        return [("settings", "not kept in this folder (no snapshot, state.arrow)")]
    forgets = facts.get("half_life")
    rows = [
        ("baseline", f"{facts['baseline']:,} samples"),
        ("false-alarm probability", f"{facts['false_alarm']:g} for each limit"),
        ("method of the SPE limit", str(facts["limits"])),
        ("half-life", "never forgets" if forgets is None else f"{forgets:,g} samples"),
        (
            "an event opens and closes",
            f"with {facts['opens']} of {facts['window']} samples beyond the limit; after "
            f"{facts['quiet']:,} without",
        ),
        ("repetition", f"cosine of at least {facts['same']:g}"),
    ]
    adopt = run.about.get("adopt_after")
    if adopt is not None:
        rows.append(("adopted after", f"{adopt:,} samples" if adopt else "never"))
    return rows


def _picture(body: ET.Element, picture: Picture) -> None:
    section = ET.SubElement(body, "section", {"class": "picture"})
    _add(section, "h2", picture.title)
    text = _add(section, "p", picture.text)
    if picture.png is None:
        text.set("class", "missing")
        return
    width, height = (str(round(dots * 96 / DPI)) for dots in picture.size)
    data = base64.b64encode(picture.png).decode("ascii")
    ET.SubElement(
        section, "img", src=f"data:image/png;base64,{data}", alt=f"{picture.title}. {picture.text}",
        width=width, height=height,
    )  # fmt: skip


def _events(body: ET.Element, run: KeptRun) -> None:
    section = ET.SubElement(body, "section")
    _add(section, "h2", "Events")
    listed = sorted(run.events, key=lambda event: (-event.peak, event.event))[:MOST_LISTED]
    if len(listed) < len(run.events):
        text = f"The {MOST_LISTED} strongest of {len(run.events):,}; all are in events.jsonl."
        _add(section, "p", text)
    if listed:
        dates = dated(run.envelope, run.about.get("clock"))
        _table(section, [_row(event, dates) for event in sorted(listed, key=lambda e: e.event)])
    else:
        _add(section, "p", "No event has closed in this run.").set("class", "missing")
    for number, (first, last) in sorted(run.unclosed.items())[:MOST_LISTED]:
        text = f"Event {number} has no line in events.jsonl: not closed up to sample {last:,}, "
        _add(section, "p", f"{text}begun at sample {first:,}.")


def _row(event: EventRow, dates: bool) -> list[str]:
    more = len(event.channels) - MOST_NAMES
    names = ", ".join(event.channels[:MOST_NAMES]) + (f" and {more:,} more" if more > 0 else "")
    repeats = "" if event.repeats is None else f"event {event.repeats}"
    if event.cosine is not None:
        repeats += f" (cosine {event.cosine:.2f})"
    return [
        str(event.event),
        *("" if t is None else _moment(t, dates) for t in (event.start_time, event.end_time)),
        f"{event.start:,}",
        f"{event.end:,}",
        f"{event.peak:,.3g}" if event.peak < 1000 else f"{event.peak:,.0f}",
        names,
        repeats,
        event.label or "",
    ]


def _moment(time: str, dates: bool) -> str:
    """Return a date and time without the zeros that end it, or the seconds that it stands for."""
    if not dates:
        try:
            return f"{int(np.datetime64(time.rstrip('Z'), 'ns').astype(np.int64)) / SECOND:,.10g} s"
        except ValueError:
            # a line that somebody edited: as it stands
            return time
    whole, _, fraction = time.replace("T", " ").partition(".")
    fraction = fraction.rstrip("0")
    return f"{whole}.{fraction}" if fraction else whole


def _pairs(body: ET.Element, rows: Sequence[tuple[str, str]]) -> None:
    table = ET.SubElement(ET.SubElement(body, "table"), "tbody")
    for name, text in rows:
        row = ET.SubElement(table, "tr")
        _add(row, "th", name).set("scope", "row")
        _add(row, "td", text)


def _table(body: ET.Element, rows: Sequence[Sequence[str]]) -> None:
    """Add the events; columns that are empty throughout, such as times, are left out."""
    kept = [i for i in range(len(_HEADS)) if any(row[i] for row in rows)]
    table = ET.SubElement(body, "table", {"class": "events"})
    parent = ET.SubElement(ET.SubElement(table, "thead"), "tr")
    for position in kept:
        _cell(parent, "th", position, _HEADS[position][0])
    rest = ET.SubElement(table, "tbody")
    for row in rows:
        parent = ET.SubElement(rest, "tr")
        for position in kept:
            _cell(parent, "td", position, row[position])


def _cell(parent: ET.Element, tag: str, position: int, text: str) -> None:
    cell = _add(parent, tag, text)
    if _HEADS[position][1]:
        cell.set("class", _HEADS[position][1])


def _add(parent: ET.Element, tag: str, text: str) -> ET.Element:
    element = ET.SubElement(parent, tag)
    element.text = clean(text) if tag != "style" else text
    return element


def clean(text: str) -> str:
    """Return text from outside without what HTML cannot hold or a reader would be misled by.

    Examples
    --------
    >>> from streambasis.report.page import clean
    >>> clean("flow" + chr(0) + chr(0x202E) + "1")
    'flow��1'
    """
    return "".join(
        "\ufffd" if unicodedata.category(c) in ("Cc", "Cs") or ord(c) in _TURNING else c
        for c in text
    )
