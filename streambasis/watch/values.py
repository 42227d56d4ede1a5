"""What a setting may be: one check for what is typed and for what a file holds.

A check takes a value as TOML has it and returns it as the daemon uses it, or raises ValueError
with what was expected. What is typed is text: ``number`` makes of it what TOML would hold.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

LOOPBACK = "127.0.0.1"
MOST_WHOLE = 10**15
UNITS = {"ms": 0.001, "s": 1.0, "min": 60.0, "h": 3600.0, "d": 86_400.0}

_LENGTH = re.compile(r"([0-9]{1,9}(?:\.[0-9]{1,9})?) ?(ms|s|min|h|d)")
_COUNT = re.compile(r"[0-9]{1,18}")
_ADDRESS = re.compile(r"(?:(?:\[([0-9a-fA-F:.%]{1,80})\]|([^:\[\]/@\s]{0,255})):)?([0-9]{1,5})")
_MOST_SHOWN = 60


class Every(NamedTuple):
    """How often the run is kept: after so many samples or seconds, whichever comes first."""

    samples: int
    seconds: float

    def __str__(self) -> str:
        return f"{self.samples},{self.seconds:g}s"


class Endpoint(NamedTuple):
    """Where the metrics are served."""

    host: str
    port: int

    def __str__(self) -> str:
        host = f"[{self.host}]" if ":" in self.host else self.host
        return f"{host}:{self.port}"


SNAPSHOT_EVERY = Every(1 << 16, 10.0)
"""What a crash makes the next run do again."""


def number(typed: str) -> object:
    """Return typed text as a number where it is one, else as it is."""
    for kind in (int, float):
        try:
            return kind(typed)
        except ValueError:
            continue
    return typed


def shown(value: object) -> str:
    """Return a value for a message: never long, never an array or a table in full."""
    if isinstance(value, tuple) and len(value) == 1:
        # what was typed once of an option that may be typed again
        return shown(value[0])
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return "an array"
    try:
        text = repr(value) if isinstance(value, str | int | float) else str(value)
    except ValueError:
        # Python refuses to write whole numbers of thousands of digits
        return "a very long number"
    if isinstance(value, bool):
        text = text.lower()
    return text if len(text) <= _MOST_SHOWN else f"{text[:_MOST_SHOWN]}..."


def switch(value: object) -> bool:
    """Check true or false."""
    if not isinstance(value, bool):
        raise ValueError("true or false")
    return value


def whole(least: int, most: int = MOST_WHOLE) -> Callable[[object], int]:
    """Return a check for a whole number in a range."""

    def check(value: object) -> int:
        if not isinstance(value, int) or isinstance(value, bool) or not least <= value <= most:
            upto = "" if most == MOST_WHOLE else f" and at most {most}"
            raise ValueError(f"a whole number of at least {least}{upto}")
        return value

    return check


def probability(value: object) -> float:
    """Check a false-alarm probability."""
    # what the monitor takes; beyond one in five a limit says nothing
    if not 0.0 < _real(value) <= 0.2:
        raise ValueError("a probability above 0 and up to 0.2")
    return _real(value)


def half_life(value: object) -> float:
    """Check a number of samples, 0 meaning never."""
    if not (_real(value) == 0 or 1.0 <= _real(value) < math.inf):
        raise ValueError("a number of samples of at least 1, or 0 for never")
    return _real(value)


def duration(value: object) -> float:
    """Check a length of time such as "30s" and return seconds; a number is seconds."""
    if 0.0 <= _real(value) <= 1e9:
        return _real(value)
    match = _LENGTH.fullmatch(value) if isinstance(value, str) else None
    if match is None:
        raise ValueError(f'a length of time such as "30s" (units: {", ".join(UNITS)})')
    return float(match[1]) * UNITS[match[2]]


def every(value: object) -> Every:
    """Check how often the run is kept; what is not given stays at its default."""
    items = value if isinstance(value, list | tuple) else [value]
    # what is typed may hold both, separated by a comma
    parts = [p for i in items for p in (i.split(",") if isinstance(i, str) else [i])]
    try:
        given = [_samples_or_seconds(part) for part in parts]
    except ValueError:
        given = []
    if not given or len(dict(given)) < len(given):
        raise ValueError(
            'a number of samples such as 50000, a length of time such as "10s", or both'
        )
    return SNAPSHOT_EVERY._replace(**dict(given))


def _samples_or_seconds(part: object) -> tuple[str, Any]:
    """Return one of the two with the name of its field."""
    if isinstance(part, str):
        part = part.strip()
        if not _COUNT.fullmatch(part):
            seconds = duration(part)
            if not seconds:
                raise ValueError("more than no time")
            return "seconds", seconds
        part = int(part)
    return "samples", whole(1)(part)


def one_of(*choices: str) -> Callable[[object], str]:
    """Return a check for one of a few words."""

    def check(value: object) -> str:
        if value not in choices:
            raise ValueError(" or ".join(choices))
        return str(value)

    return check


def text(value: object) -> str:
    """Check a name: text of one line."""
    if not isinstance(value, str) or not value or not value.isprintable() or len(value) > 1000:
        raise ValueError("text of one line")
    return value


def names(value: object) -> tuple[str, ...]:
    """Check names: an array of them, or lists separated by commas.

    A name that holds a comma stands in quotes in such a list.
    """
    if isinstance(value, list):
        found = [name(item) for item in value]
    else:
        lists = value if isinstance(value, tuple) else (value,)
        try:
            rows = csv.reader(io.StringIO("\n".join(lists)), skipinitialspace=True)
            found = [name(cell.strip()) for row in rows for cell in row]
        except (TypeError, csv.Error):
            raise ValueError("names separated by commas, or an array of names") from None
    if not found or len(set(found)) < len(found):
        raise ValueError("one or more names, none of them twice")
    return tuple(found)


def name(value: object) -> str:
    """Check the name of a column."""
    if not isinstance(value, str) or not value:
        raise ValueError("the name of a column, or such names")
    return value


def path(value: object) -> Path:
    """Check the path of a file or folder."""
    if not isinstance(value, str) or not value or "\0" in value or len(value) > 4096:
        raise ValueError("the path of a file or folder")
    return Path(value)


def source(value: object) -> str:
    """Check a feed: a path, ``-``, or an address, which is looked at when it is opened."""
    if not isinstance(value, str) or not value or "\0" in value or len(value) > 70_000:
        raise ValueError("a file, a folder, - or mqtt://host:port/topic")
    return value


def endpoint(value: object) -> Endpoint:
    """Check HOST:PORT; without a host it is the loopback address."""
    port = isinstance(value, int) and not isinstance(value, bool) and 0 <= value <= 65535
    match = _ADDRESS.fullmatch(str(value)) if port or isinstance(value, str) else None
    if match is None or int(match[3]) > 65535:
        raise ValueError("HOST:PORT such as 127.0.0.1:9464, or a port of the loopback address")
    return Endpoint(match[1] or match[2] or LOOPBACK, int(match[3]))


def _real(value: object) -> float:
    """Return a number, or NaN for what is none or lies out of range."""
    if not isinstance(value, int | float) or isinstance(value, bool) or abs(value) > 1e300:
        return math.nan
    return float(value)
