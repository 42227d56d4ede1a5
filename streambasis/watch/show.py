"""``streambasis show``: what a snapshot holds, for people and for programs."""

from __future__ import annotations

import datetime as dt
import json
import math
import os
from pathlib import Path
from typing import Any, TextIO

import numpy as np
from rich.console import Console
from rich.table import Table

from streambasis.basis import StreamBasis
from streambasis.monitor import NoveltyMonitor
from streambasis.principal import PrincipalBasis
from streambasis.snapshot import load, read_outline
from streambasis.times import NANOSECONDS

MOST_NAMES = 8
MOST_DIRECTIONS = 20
LEADING = 3
"""How many channel names, directions, and channels of a direction are shown to people."""

UNIX_SINCE = 10**17
"""Nanoseconds, about three years: what is earlier is taken for seconds from the feed's start."""

WIDE = 1000
"""Columns of output that goes to no terminal: nothing is cut off or broken into lines."""


def show(path: Path, out: TextIO, *, as_json: bool) -> None:
    """Write what a snapshot holds.

    Parameters
    ----------
    path : Path
        The snapshot.
    out : text file
        Where to.
    as_json : bool
        One JSON object with everything, instead of text made for reading.

    Raises
    ------
    SnapshotError
        If the file is no sound snapshot.
    """
    content = describe(path)
    if as_json:
        out.write(json.dumps(content, ensure_ascii=False) + "\n")
    else:
        _print(content, plain_console(out))


def describe(path: Path) -> dict[str, Any]:
    """Return what a snapshot holds as plain numbers, text, lists and dicts.

    Raises
    ------
    SnapshotError
        If the file is no sound snapshot.
    """
    obj = load(path)
    outline, status = read_outline(path), os.stat(path)
    saved = dt.datetime.fromtimestamp(status.st_mtime, dt.UTC)
    content: dict[str, Any] = {
        "file": os.fspath(path),
        "bytes": status.st_size,
        "saved": saved.isoformat(timespec="seconds"),
        "written_by": outline["written_by"],
        "format": outline["format"],
        "digest": outline["digest"],
        "kind": type(obj).__name__,
        "channels": list(obj.channels),
        "samples": obj.count,
    }
    if isinstance(obj, NoveltyMonitor):
        content |= _monitor(obj)
    elif isinstance(obj, PrincipalBasis):
        content |= _principal(obj)
    else:
        content |= _stream(obj)
    return {key: _plain(value) for key, value in content.items()}


def _stream(basis: StreamBasis) -> dict[str, Any]:
    return {
        "dtype": basis.dtype.name,
        "rank": basis.rank,
        "capacity": basis.capacity,
        **_window(basis),
        "directions": [
            {"pivot": pivot, "channels": leading}
            for pivot, leading in zip(basis.pivots, _leading(basis), strict=True)
        ],
        "audit": basis.audit()._asdict(),
    }


def _window(basis: StreamBasis) -> dict[str, Any]:
    if basis.window is None and basis.span is None:
        return {"newest_sample": basis.count - 1 if basis.count else None}
    members = basis.members
    times = basis.to_state().parts["core"].arrays["times"]
    span = basis.span
    return {
        "window": basis.window,
        "span_seconds": None if span is None else span / np.timedelta64(1, "s"),
        "window_samples": len(members),
        "oldest_sample": members[0] if len(members) else None,
        "newest_sample": members[-1] if len(members) else None,
        "oldest_time": _moment(times[0]) if len(times) else None,
        "newest_time": _moment(times[-1]) if len(times) else None,
    }


def _moment(time: np.int64) -> str | float:
    """Return a time as a date where it counts from the Unix epoch, else in seconds.

    A feed that counts from its own start does not run for three years.
    """
    if abs(int(time)) < UNIX_SINCE:
        return float(time / NANOSECONDS)
    return str(np.datetime64(int(time), "ns"))


def _principal(basis: PrincipalBasis) -> dict[str, Any]:
    return {
        "dtype": basis.dtype.name,
        "rank": basis.rank,
        "half_life": math.log(0.5) / math.log(basis.forget) if basis.forget < 1.0 else None,
        "noise": basis.noise,
        "newest_sample": basis.count - 1 if basis.count else None,
        "directions": [
            {"energy": energy, "channels": leading}
            for energy, leading in zip(basis.energies, _leading(basis), strict=True)
        ],
        "audit": basis.audit()._asdict(),
    }


def _monitor(monitor: NoveltyMonitor) -> dict[str, Any]:
    content: dict[str, Any] = {
        "baseline": monitor.baseline,
        "baseline_done": monitor.baseline_done,
        "newest_sample": monitor.count - 1 if monitor.count else None,
    }
    if not monitor.baseline_done:
        return content
    events = monitor.events
    basis = _principal(monitor.basis)
    return content | {
        "rank": monitor.rank,
        "half_life": basis["half_life"],
        "noise": monitor.noise,
        "drift_degrees": math.degrees(monitor.drift),
        "constant_channels": monitor.constant,
        "events": len(events),
        "open_events": [event["event"] for event in events if event.open],
        "adopted_events": monitor.adopted,
        "last_event": dict(events[-1]) if events else None,
        "directions": basis["directions"][: monitor.rank],
        "audit": basis["audit"],
    }


def _leading(basis: StreamBasis | PrincipalBasis) -> list[dict[str, float]]:
    """Return for each direction the channels that carry most of it, with their shares.

    Shares are taken in the inner product, where the units of the channels do not count.
    """
    found = []
    for squares in np.abs(basis._inner.enter(basis.vectors)) ** 2:
        shares = squares / squares.sum()
        order = np.argsort(shares)[::-1][:LEADING]
        found.append({basis.channels[i]: float(shares[i]) for i in order})
    return found


def _plain(value: Any) -> Any:
    """Return a value as JSON holds it; what is not finite becomes None."""
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not math.isfinite(value) else value


def plain_console(out: TextIO) -> Console:
    """Return a console that prints text as it is: a channel name may look like markup."""
    width = None if out.isatty() else WIDE
    return Console(file=out, width=width, highlight=False, markup=False, emoji=False)


def _print(content: dict[str, Any], console: Console) -> None:
    for name, text in _lines(content):
        console.print(f"{name:<13}{text}", soft_wrap=True)
    directions = content.get("directions", [])
    if directions:
        table = Table(box=None, pad_edge=False, header_style="bold")
        first = "energy" if "energy" in directions[0] else "pivot"
        table.add_column("direction", justify="right")
        table.add_column("energy" if first == "energy" else "pivot sample", justify="right")
        table.add_column("channels that carry it")
        for number, direction in enumerate(directions[:MOST_DIRECTIONS]):
            shares = direction["channels"].items()
            table.add_row(
                str(number),
                f"{direction[first]:.5g}" if first == "energy" else f"{direction[first]:,}",
                ", ".join(f"{name} {100 * share:.0f} %" for name, share in shares),
            )
        console.print()
        console.print(table)
        if len(directions) > MOST_DIRECTIONS:
            console.print(f"and {len(directions) - MOST_DIRECTIONS} more: --json has them all")


def _lines(content: dict[str, Any]) -> list[tuple[str, str]]:
    names = content["channels"]
    more = f" and {len(names) - MOST_NAMES} more" if len(names) > MOST_NAMES else ""
    lines = [
        ("file", f"{content['file']}, {content['bytes']:,} bytes, saved {content['saved']}"),
        ("written by", f"{content['written_by']}, format {content['format']}; digest verified"),
        ("kind", content["kind"] + (f", {content['dtype']}" if "dtype" in content else "")),
        ("channels", f"{len(names)}: {', '.join(names[:MOST_NAMES])}{more}"),
        ("samples", _samples(content)),
    ]
    if "window_samples" in content:
        lines.append(("window", _extent(content)))
    if "baseline_done" in content:
        done = "complete" if content["baseline_done"] else "not complete"
        lines.append(("baseline", f"{content['baseline']:,} samples, {done}"))
    if "rank" in content:
        lines.append(("rank", f"{content['rank']} directions"))
    if content.get("half_life"):
        lines.append(("half-life", f"{content['half_life']:,.0f} samples"))
    if "noise" in content:
        floor = content["noise"]
        unit = "variance per residual dimension"
        unit += ", channels scaled by their noise" if "baseline" in content else ""
        lines.append(("noise floor", "unknown" if floor is None else f"{floor:.4g} ({unit})"))
    if "drift_degrees" in content:
        lines += [
            ("drift", f"{content['drift_degrees']:.3g}° since the baseline"),
            ("events", _events(content)),
        ]
    if content.get("constant_channels"):
        lines.append(("constant", ", ".join(content["constant_channels"])))
    if "audit" in content:
        lines.append(("audit", _audit(content["audit"])))
    return lines


def _samples(content: dict[str, Any]) -> str:
    newest = content["newest_sample"]
    if newest is None or "window_samples" in content:
        return f"{content['samples']:,}" if content["samples"] else "none yet"
    return f"{content['samples']:,}, the newest is {newest:,}"


def _extent(content: dict[str, Any]) -> str:
    limits = []
    if content["window"] is not None:
        limits.append(f"{content['window']:,} samples")
    if content["span_seconds"] is not None:
        limits.append(f"{content['span_seconds']:,g} s")
    text = " or ".join(limits)
    if content["window_samples"]:
        first, last = (f"{content[f'{side}_sample']:,}" for side in ("oldest", "newest"))
        if content["oldest_time"] is not None:
            first += f" ({_shown(content['oldest_time'])})"
            last += f" ({_shown(content['newest_time'])})"
        text += f"; it holds {content['window_samples']:,}, from sample {first} to {last}"
    return text


def _shown(moment: str | float) -> str:
    return moment if isinstance(moment, str) else f"{moment:g} s"


def _events(content: dict[str, Any]) -> str:
    text = f"{content['events']}"
    if content["open_events"]:
        text += f", open: {', '.join(map(str, content['open_events']))}"
    if content["adopted_events"]:
        text += f", adopted: {', '.join(map(str, content['adopted_events']))}"
    last = content["last_event"]
    if last is not None:
        label = f" ({last['label']})" if last["label"] else ""
        text += f"; the last is {last['event']}{label}, peak {last['peak']:.1f} x limit"
    return text


def _audit(audit: dict[str, Any]) -> str:
    text = (
        f"defect {audit['orthogonality']:.2g} (sound below 3), condition {audit['condition']:.3g}"
    )
    if audit["coverage"] is not None:
        text += f", coverage {audit['coverage']:.2g} (sound up to 1)"
    return text + f", {audit['renewals']} renewals"
