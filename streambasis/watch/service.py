"""``watch`` from beginning to end: what it is told, put together and run."""

from __future__ import annotations

import hashlib
import os
import platform
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import replace
from typing import TextIO

from streambasis.errors import FeedError, SettingError
from streambasis.feeds import Broker, Feed, FeedOptions, Position, open_feed
from streambasis.feeds.broker import CREDENTIALS, credentials_of
from streambasis.monitor import NoveltyMonitor
from streambasis.watch.home import Home
from streambasis.watch.loop import Run
from streambasis.watch.settings import STANDARD_INPUT, Settings
from streambasis.watch.stopping import Signals
from streambasis.watch.terminal import Terminal

_WHEN_FULL = {"block": "block", "drop": "drop-oldest"}
_ADDRESSES = ("mqtt://", "mqtts://")


def is_address(feed: str) -> bool:
    """Return whether a feed is a topic of a broker."""
    return feed.startswith(_ADDRESSES)


def named_feed(settings: Settings) -> str:
    """Return the feed.

    Raises
    ------
    SettingError
        If there is none.
    """
    if settings.feed is None:
        raise SettingError("no feed: name it behind 'watch', or as 'feed' in the file of --config")
    return settings.feed


def feed_options(settings: Settings) -> FeedOptions:
    """Return how the feed is read.

    Raises
    ------
    FeedError
        If the user and the password of a broker cannot be read.
    """
    broker = None
    if is_address(named_feed(settings)):
        broker = broker_of(settings)
    return FeedOptions(
        format=settings.format, strict=settings.strict, follow=settings.follow, broker=broker
    )


def broker_of(settings: Settings) -> Broker:
    """Return how the broker is reached.

    Notes
    -----
    The broker keeps what comes while we are away under the name of the client. Two runs of one
    feed on one machine would take that session from each other, so the home is part of the name.
    """
    feed = named_feed(settings)
    environment = dict(os.environ)
    if settings.credentials is not None:
        environment[CREDENTIALS] = str(settings.credentials)
    user, password = credentials_of(environment)
    client = settings.client
    if client is None and settings.home is not None:
        told = f"{platform.node()} {feed} {os.path.realpath(settings.home)}"
        made = hashlib.blake2b(told.encode(), digest_size=8).hexdigest()
        client = f"streambasis-{made}"
    return Broker(
        user=user,
        password=password,
        client=client,
        version=settings.mqtt_version,
        queue=settings.mqtt_queue,
        when_full=_WHEN_FULL[settings.on_overload],
        ca_file=settings.ca_file,
        certificate_file=settings.certificate_file,
        key_file=settings.key_file,
    )


def opened(settings: Settings, options: FeedOptions, position: Position | None) -> Feed:
    """Open the feed."""
    return open_feed(
        named_feed(settings),
        channels=settings.channels,
        time=settings.time,
        position=position,
        options=options,
    )


def about(settings: Settings, feed: Feed) -> dict[str, object]:
    """Return what a home must hold for the run to go on there."""
    name = named_feed(settings)
    file = not is_address(name) and name != STANDARD_INPUT
    return {
        "feed": os.path.realpath(name) if file else name,
        "channels": list(feed.columns.channels),
        "baseline": settings.baseline,
        "false_alarm": settings.false_alarm,
        "half_life": settings.half_life or None,
        "adopt_after": settings.adopt_after,
    }


def new_monitor(settings: Settings, channels: tuple[str, ...]) -> NoveltyMonitor:
    """Return a monitor that has seen nothing."""
    return NoveltyMonitor(
        channels,
        baseline=settings.baseline,
        false_alarm=settings.false_alarm,
        half_life=settings.half_life or None,
    )


def serve(
    settings: Settings, out: TextIO, err: TextIO, again: Callable[[], Settings] | None = None
) -> None:
    """Run a monitor over a feed until the feed ends, or somebody asks to stop.

    Parameters
    ----------
    settings : Settings
        What to do.
    out, err : text file
        Standard output and standard error.
    again : callable, optional
        Reads the settings again, for SIGHUP.
    """
    del again
    with ExitStack() as held:
        signals = held.enter_context(Signals())
        options = replace(feed_options(settings), stop=signals.asked)
        home = held.enter_context(Home(settings.home)) if settings.home is not None else None
        try:
            feed = opened(settings, options, home.position if home is not None else None)
        except FeedError:
            if signals.asked.is_set():
                # it waited for the first sample, and nothing was taken yet
                return
            raise
        held.enter_context(feed)
        if home is not None:
            home.begin(about(settings, feed))
        monitor = home.monitor() if home is not None else None
        if monitor is None:
            monitor = new_monitor(settings, feed.columns.channels)
        terminal = Terminal(out, err, total=feed.rows, as_json=settings.json, quiet=settings.quiet)
        run = Run(
            feed,
            monitor,
            terminal,
            home=home,
            every=settings.snapshot_every,
            adopt_after=settings.adopt_after,
        )
        with terminal:
            summary = run(signals.asked)
    terminal.summary(summary)
