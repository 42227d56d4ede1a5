"""``watch`` from beginning to end: what it is told, put together and run."""

from __future__ import annotations

import functools
import hashlib
import os
import platform
import threading
from collections.abc import Callable, Sequence
from contextlib import ExitStack
from dataclasses import replace
from typing import TextIO

from streambasis.errors import FeedError, SettingError
from streambasis.feeds import Broker, Feed, FeedOptions, Keys, Position, open_feed
from streambasis.feeds.broker import CREDENTIALS, credentials_of
from streambasis.fleet import Fleet
from streambasis.fleet.folder import kept_position
from streambasis.monitor import NoveltyMonitor
from streambasis.warming import warm_up
from streambasis.watch.health import Health, Listener
from streambasis.watch.home import Home
from streambasis.watch.keyed import KeyedRun, KeyedSummary
from streambasis.watch.loop import Run
from streambasis.watch.options import spelled
from streambasis.watch.readiness import Readiness
from streambasis.watch.records import Records
from streambasis.watch.reporting import Summary
from streambasis.watch.settings import STANDARD_INPUT, Settings, changed
from streambasis.watch.stopping import Signals
from streambasis.watch.terminal import Terminal
from streambasis.watch.values import Endpoint
from streambasis.watch.vitals import Vitals

_WHEN_FULL = {"block": "block", "drop": "drop-oldest"}
_PATIENCE = 0.05
"""Seconds between two looks at whether somebody asked to stop."""

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
    options = FeedOptions(
        format=settings.format,
        strict=settings.strict,
        follow=settings.follow,
        when_full=_WHEN_FULL[settings.on_overload],
        ahead=True,
    )
    if is_address(named_feed(settings)):
        return replace(options, broker=broker_of(settings))
    return options if settings.queue is None else replace(options, queue=settings.queue)


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
    broker = Broker(
        user=user,
        password=password,
        client=client,
        version=settings.mqtt_version,
        when_full=_WHEN_FULL[settings.on_overload],
        ca_file=settings.ca_file,
        certificate_file=settings.certificate_file,
        key_file=settings.key_file,
    )
    return broker if settings.queue is None else replace(broker, queue=settings.queue)


def opened(settings: Settings, options: FeedOptions, position: Position | None) -> Feed:
    """Open the feed."""
    return open_feed(
        named_feed(settings),
        channels=settings.channels,
        time=settings.time,
        position=position,
        options=options,
    )


def about(settings: Settings, channels: Sequence[str] | None) -> dict[str, object]:
    """Return what a home must hold for the run to go on there, as far as it is known."""
    name = named_feed(settings)
    file = not is_address(name) and name != STANDARD_INPUT
    known = {} if channels is None else {"channels": list(channels)}
    return {
        "feed": os.path.realpath(name) if file else name,
        **known,
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
    settings: Settings,
    out: TextIO,
    err: TextIO,
    signals: Signals,
    again: Callable[[], Settings] | None = None,
) -> None:
    """Run a monitor over a feed until the feed ends, or somebody asks to stop.

    Parameters
    ----------
    settings : Settings
        What to do.
    out, err : text file
        Standard output and standard error.
    signals : Signals
        Where wishes are heard.
    again : callable, optional
        Reads the settings again, for SIGHUP.

    Notes
    -----
    Asked to stop while kernels are compiled, the process ends at once when everything is closed:
    the thread that compiles cannot be ended, and an interpreter that is torn down under it crashes.
    """
    service = _Service(settings, out, err)
    signals.on_stop = service.readiness.stopping
    signals.on_hang_up = functools.partial(service.reload, again)
    summary = service.run(signals.asked)
    if summary is not None:
        service.terminal.summary(summary)
    elif service.compiles:
        out.flush()
        err.flush()
        os._exit(0)


class _Service:
    """One run and those who look at it."""

    def __init__(self, settings: Settings, out: TextIO, err: TextIO) -> None:
        self._settings = settings
        self._vitals = Vitals()
        self._health = Health(self._vitals, settings.silent_after)
        self._run: Run | None = None
        self._warming: threading.Thread | None = None
        self.terminal = Terminal(
            out, err, as_json=settings.json, quiet=settings.quiet, key=settings.key
        )
        self.readiness = Readiness(self._vitals, self.terminal.warned)

    def run(self, asked: threading.Event) -> Summary | KeyedSummary | None:
        """Run until the feed ends or somebody asks to stop; None if that was before it began."""
        settings, name = self._settings, named_feed(self._settings)
        with ExitStack() as held:
            held.enter_context(self.readiness)
            options = replace(feed_options(settings), stop=asked)
            home = None
            if settings.home is not None and settings.key is None:
                format = "parquet" if settings.parquet else "arrow"
                home = held.enter_context(Home(settings.home, format))
            if settings.metrics is not None:
                self._serve_metrics(settings.metrics, held)
            if not self._warmed_up(asked):
                return None
            self._health.opened()
            if is_address(name) or name == STANDARD_INPUT or settings.follow:
                held.enter_context(Listener(self._health, self.terminal.warned))
            if settings.key is not None:
                return self._watch_keyed(settings.key, options, asked)
            if is_address(name) or name == STANDARD_INPUT:
                # these wait for the first sample, which may be hours away
                self.readiness.ready()

            def reopen(position: Position | None) -> Feed:
                channels = settings.channels
                if home is not None and position is not None:
                    # a run that goes on knows them, and waits for no message that shows them
                    channels = channels or home.channels
                feed = opened(replace(settings, channels=channels), options, position)
                self._health.trouble = lambda: feed.trouble
                return feed

            try:
                feed = held.enter_context(reopen(home.position if home is not None else None))
            except FeedError:
                if asked.is_set():
                    # it was waiting for the first sample, and nothing was taken yet
                    return None
                raise
            return self._watch(feed, home, reopen, asked)

    def _watch(
        self,
        feed: Feed,
        home: Home | None,
        reopen: Callable[[Position | None], Feed],
        asked: threading.Event,
    ) -> Summary:
        settings = self._settings
        monitor = None
        if home is not None:
            home.begin(about(settings, feed.columns.channels))
            monitor = home.monitor()
        if monitor is None:
            monitor = new_monitor(settings, feed.columns.channels)
        else:
            self.terminal.noted(f"{settings.home}: goes on behind {monitor.count:,} samples")
        self.terminal.expect(feed.rows)
        self._run = Run(
            feed,
            monitor,
            self.terminal,
            home=home,
            every=settings.snapshot_every,
            adopt_after=settings.adopt_after,
            vitals=self._vitals,
            reopen=reopen,
        )
        self.readiness.ready()
        with self.terminal:
            return self._run(asked)

    def _watch_keyed(self, key: str, options: FeedOptions, asked: threading.Event) -> KeyedSummary:
        """Run a monitor for each value of a column, from the home's last commit if there is one."""
        settings, keys = self._settings, Keys(key)
        if settings.parquet:
            raise SettingError("parquet: decisions of many feeds are kept as Arrow IPC files only")
        options = replace(options, keys=keys)
        with ExitStack() as held:
            home = settings.home
            position = None if home is None else kept_position(home)
            feed = held.enter_context(opened(settings, options, position))
            # the time is given beside the rows: no column is looked for
            config = {
                "channels": feed.columns.channels,
                "baseline": settings.baseline,
                "false_alarm": settings.false_alarm,
                "half_life": settings.half_life or None,
            }
            fleet = held.enter_context(Fleet(config, key=key, home=home))
            if len(fleet):
                self.terminal.noted(f"{home}: goes on with {len(fleet):,} feeds")
            self.terminal.expect(feed.rows)
            records = None if home is None else functools.partial(Records, home)
            run = KeyedRun(
                feed,
                keys,
                fleet,
                self.terminal,
                records=records,
                every=settings.snapshot_every,
                adopt_after=settings.adopt_after,
                vitals=self._vitals,
            )
            self.readiness.ready()
            with self.terminal:
                return run(asked)

    @property
    def compiles(self) -> bool:
        """Whether kernels are still being compiled."""
        return self._warming is not None and self._warming.is_alive()

    def _warmed_up(self, asked: threading.Event) -> bool:
        """Compile what a run needs; return whether that was done before somebody asked to stop.

        Notes
        -----
        A tenth of a second where kernels have been compiled before, many seconds otherwise. A
        thread does it, which a process that is asked to stop leaves behind.
        """
        failures: list[BaseException] = []

        def work() -> None:
            try:
                warm_up(NoveltyMonitor)
            except BaseException as error:
                failures.append(error)

        if asked.is_set():
            return False
        self._warming = threading.Thread(target=work, name="warm-up", daemon=True)
        self._warming.start()
        while self._warming.is_alive() and not asked.is_set():
            self._warming.join(_PATIENCE)
        if failures:
            raise failures[0]
        return not asked.is_set()

    def _serve_metrics(self, endpoint: Endpoint, held: ExitStack) -> None:
        # the packages that it needs are not loaded by a run without it
        from streambasis.watch.metrics import registry_of
        from streambasis.watch.serving import MetricsServer

        registry = registry_of(self._vitals, self._health)
        warned = self.terminal.warned
        server = held.enter_context(MetricsServer(endpoint, registry, self._health, warned))
        self.terminal.noted(f"metrics at {server.url}")
        if not server.loopback:
            warned(
                f"warning: {server.url} can be read by whoever reaches this machine: it asks for "
                "no password and is not encrypted"
            )

    def reload(self, again: Callable[[], Settings] | None) -> None:
        """Read the settings again and take over what may change while the daemon runs."""
        if again is None:
            self.terminal.warned("SIGHUP: there is no --config to read again")
            return
        self.readiness.reloading()
        try:
            after = again()
        except SettingError as error:
            self.terminal.warned(f"{error}; everything stays as it was")
        else:
            self._take_over(after)
        self.readiness.reloaded()

    def _take_over(self, after: Settings) -> None:
        live, others = changed(self._settings, after)
        self._settings = replace(self._settings, **{name: getattr(after, name) for name in live})
        self._health.silent_after = after.silent_after
        self.terminal.quiet = after.quiet
        if self._run is not None:
            self._run.commit_every(after.snapshot_every)
        taken = ", ".join(map(spelled, live)) or "nothing new"
        note = f"read the settings again: {taken}"
        if others:
            note += f"; only another start changes {', '.join(map(spelled, others))}"
        self.terminal.warned(note)
