"""What a run would be, without running it."""

from __future__ import annotations

import os
import ssl
from collections.abc import Sequence
from dataclasses import fields
from pathlib import Path
from typing import TextIO

from streambasis.errors import FeedError, HomeError, SnapshotError
from streambasis.feeds import Broker
from streambasis.feeds.broker import address_of
from streambasis.snapshot import read_state
from streambasis.watch.home import NO_WAY_ON, refuse_another
from streambasis.watch.options import FEED, spelled
from streambasis.watch.service import (
    about,
    broker_of,
    feed_options,
    is_address,
    new_monitor,
    opened,
)
from streambasis.watch.settings import STANDARD_INPUT, Settings

_WIDTH = 18


def check(settings: Settings, written: set[str], out: TextIO) -> None:
    """Write what ``watch`` would do with these settings.

    Parameters
    ----------
    settings : Settings
        Of a file.
    written : set of str
        The fields that the file sets; the others are at their defaults.
    out : text file
        Where it goes.

    Raises
    ------
    FeedError
        If the feed cannot be opened. Of a broker only the address and the files that the
        connection needs are looked at: to connect would take the session from a running daemon.
    HomeError
        If the home cannot be written, or holds a run of something else.
    """
    feed, channels = _feed(settings)
    rows = [(FEED, feed)]
    if settings.home is not None:
        _check_home(settings.home)
        _check_run(settings, settings.home, channels)
    for field in fields(settings):
        value = getattr(settings, field.name)
        if field.name != FEED and value is not None:
            default = "" if field.name in written else "  (default)"
            rows.append((spelled(field.name), f"{_shown(value)}{default}"))
    for name, text in rows:
        out.write(f"{name:<{_WIDTH}} {text}\n")


def _feed(settings: Settings) -> tuple[str, Sequence[str] | None]:
    """Return what the feed is, and its channels where they are known."""
    feed = settings.feed
    if feed is None:
        return "none: name it behind 'watch'", settings.channels
    if is_address(feed):
        address = address_of(feed)
        broker = broker_of(settings)
        if address.tls:
            _check_tls(feed, broker)
        where = f"(topic {address.topic} of {address.host}, port {address.port})"
        return f"{feed}  {where}", settings.channels
    if feed == STANDARD_INPUT:
        return "standard input", settings.channels
    with opened(settings, feed_options(settings), None) as found:
        columns = found.columns
        new_monitor(settings, columns.channels)
    time = "no time column" if columns.time is None else f"time in {columns.time!r}"
    return f"{feed}  ({len(columns.channels)} channels, {time})", columns.channels


def _check_tls(feed: str, broker: Broker) -> None:
    try:
        context = ssl.create_default_context(cafile=broker.ca_file)
        if broker.certificate_file is not None:
            context.load_cert_chain(broker.certificate_file, broker.key_file)
    except OSError as error:
        raise FeedError(f"{feed}: the TLS files cannot be used ({error})") from None


def _check_home(home: Path) -> None:
    """Look for what would keep a run from being kept, and leave the folder as it is."""
    there = home
    while not there.exists() and there != there.parent:
        there = there.parent
    if not there.is_dir():
        raise HomeError(f"{home}: cannot be written ({there} is no folder)")
    if not os.access(there, os.W_OK | os.X_OK):
        raise HomeError(f"{home}: cannot be written ({there} belongs to somebody else)")


def _check_run(settings: Settings, home: Path, channels: Sequence[str] | None) -> None:
    """Look whether the run in a home, which a daemon may be writing, is the one to go on with."""
    file = home / "state.arrow"
    if settings.feed is None or not file.exists():
        return
    try:
        state = read_state(file)
    except SnapshotError as error:
        raise HomeError(f"{error}; {NO_WAY_ON}") from None
    refuse_another(home, state.facts.get("about", {}), about(settings, channels))


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:g}"
    if isinstance(value, tuple) and not hasattr(value, "_fields"):
        return ", ".join(value)
    return str(value)
