"""How each setting of ``streambasis watch`` is given, on the command line and in a file alike."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from streambasis.watch import values

FEED = "feed"
"""The setting that is an argument, not an option."""


@dataclass(frozen=True, slots=True)
class Option:
    """How a setting is given.

    Attributes
    ----------
    check : callable
        Takes what a file holds, returns the setting or raises ValueError with what is expected.
    help : str
        For the help of the command.
    metavar : str
        What stands for the value there.
    typed : callable
        Makes of typed text what a file would hold.
    many : bool
        May be given again.
    switch : bool
        Takes no value: ``--name`` and ``--no-name``.
    live : bool
        May change while the daemon runs.
    """

    check: Callable[[object], Any]
    help: str
    metavar: str = ""
    typed: Callable[[str], object] = str
    many: bool = False
    switch: bool = False
    live: bool = False


OPTIONS = {
    "feed": Option(values.source, "The feed.", "FEED"),
    "channels": Option(
        values.names,
        "Columns to watch, separated by commas; may be given again. Default: all but the time.",
        "NAMES",
        many=True,
    ),
    "time": Option(
        values.name,
        "The time column. Default: found by itself where there is one obvious candidate.",
        "COLUMN",
    ),
    "key": Option(
        values.text,
        "The column that tells several feeds in one file or pipe apart: each of its values has a "
        "monitor of its own.",
        "COLUMN",
    ),
    "format": Option(
        values.one_of("csv", "json"),
        "csv or json, for text whose first bytes should not decide.",
        "FORMAT",
    ),
    "follow": Option(
        values.switch,
        "The file still grows: wait for more at its end, through rotation.",
        switch=True,
    ),
    "strict": Option(
        values.switch,
        "Stop at the first malformed row, instead of counting it and putting it aside.",
        switch=True,
    ),
    "baseline": Option(
        values.whole(32), "Samples of ordinary running at the start.", "N", typed=values.number
    ),
    "false_alarm": Option(
        values.probability,
        "Probability that an ordinary sample is beyond its limit.",
        "P",
        typed=values.number,
    ),
    "half_life": Option(
        values.half_life,
        "Samples after which the basis has forgotten half of what it saw, so that slow drift is "
        "followed; 0 never forgets.",
        "N",
        typed=values.number,
    ),
    "adopt_after": Option(
        values.whole(0),
        "An event still open after N samples is adopted as known behaviour; 0 never adopts.",
        "N",
        typed=values.number,
    ),
    "home": Option(
        values.path,
        "Keep decisions, events and the run itself in this folder; with the same folder again the "
        "run goes on where it stopped.",
        "DIR",
    ),
    "snapshot_every": Option(
        values.every,
        "Keep the run in the home after N samples or a TIME such as 10s or 5min, whichever comes "
        "first; give one or both.",
        "N|TIME",
        many=True,
        live=True,
    ),
    "parquet": Option(
        values.switch, "Write decisions as Parquet files instead of Arrow IPC files.", switch=True
    ),
    "metrics": Option(
        values.endpoint,
        "Serve /metrics and /healthz at this address; without HOST on the loopback address.",
        "HOST:PORT",
    ),
    "silent_after": Option(
        values.duration,
        "Without a sample for TIME such as 30s the feed counts as silent: a line says so, and "
        "/healthz is unhealthy. 0 waits for ever.",
        "TIME",
        typed=values.number,
        live=True,
    ),
    "on_overload": Option(
        values.one_of("block", "drop"),
        "When a live feed is faster than this machine: block leaves messages with the broker, "
        "rows in the file and the writer of a pipe waiting; drop drops the oldest and counts them.",
        "block|drop",
    ),
    "queue": Option(
        values.whole(1, 65535),
        "Messages of a broker, or samples of another live feed from which may be dropped, that "
        "wait in memory at most. Default: 2048 messages, 65536 samples.",
        "N",
        typed=values.number,
    ),
    "credentials": Option(
        values.path,
        "File of two lines, user and password, for the broker. Default: the environment "
        "(STREAMBASIS_MQTT_USER and STREAMBASIS_MQTT_PASSWORD, or STREAMBASIS_MQTT_CREDENTIALS "
        "with the path of such a file).",
        "FILE",
    ),
    "client": Option(
        values.text,
        "Name under which the broker keeps our session. Default: made of machine, feed and home.",
        "NAME",
    ),
    "mqtt_version": Option(values.one_of("5", "3.1.1"), "5 or 3.1.1.", "VERSION"),
    "ca_file": Option(
        values.path,
        "Whom to trust with mqtts://, as a PEM file. Default: the certificates of the system.",
        "FILE",
    ),
    "certificate_file": Option(
        values.path, "Our own certificate for mqtts://, as a PEM file.", "FILE"
    ),
    "key_file": Option(values.path, "The key of our certificate.", "FILE"),
    "json": Option(values.switch, "Events as JSON lines on standard output.", switch=True),
    "quiet": Option(
        values.switch,
        "Show nothing made for reading, warnings and errors excepted.",
        switch=True,
        live=True,
    ),
}
"""By the name of the field of ``Settings``, in the order of the help."""


def spelled(name: str) -> str:
    """Return a setting's name as it is typed and written."""
    return name.replace("_", "-")
