"""Everything ``streambasis watch`` can be told: the one place where command line and file meet."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from streambasis.errors import SettingError
from streambasis.watch.options import FEED, OPTIONS, Option, spelled
from streambasis.watch.values import SNAPSHOT_EVERY, Endpoint, Every, shown

STANDARD_INPUT = "-"


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """What ``watch`` does and how; ``OPTIONS`` says of each field how it is given and checked.

    Notes
    -----
    A field is one setting: ``--snapshot-every`` on the command line and ``snapshot-every`` in a
    file are the field ``snapshot_every``. Lengths of time are in seconds.
    """

    feed: str | None = None
    channels: tuple[str, ...] | None = None
    time: str | None = None
    key: str | None = None
    format: str | None = None
    follow: bool = False
    strict: bool = False
    baseline: int = 2000
    false_alarm: float = 1e-4
    half_life: float = 5000.0
    adopt_after: int = 1000
    home: Path | None = None
    snapshot_every: Every = SNAPSHOT_EVERY
    parquet: bool = False
    metrics: Endpoint | None = None
    silent_after: float = 0.0
    on_overload: str = "block"
    queue: int | None = None
    credentials: Path | None = None
    client: str | None = None
    mqtt_version: str = "5"
    ca_file: Path | None = None
    certificate_file: Path | None = None
    key_file: Path | None = None
    json: bool = False
    quiet: bool = False


def settings_of(
    typed: Mapping[str, Any], written: Mapping[str, Any] | None = None, file: Path | None = None
) -> Settings:
    """Return the settings of a command line and a file, the command line winning.

    Parameters
    ----------
    typed : mapping
        What stood on the command line, by field: text, a tuple of text, or a truth value.
    written : mapping, optional
        What the file holds, by field; paths are relative to the folder of the file.
    file : Path, optional
        The file.

    Raises
    ------
    SettingError
        If a value is none; the message names the option, or the file and the key.
    """
    found: dict[str, Any] = {}
    for name, value in (written or {}).items():
        found[name] = _checked(OPTIONS[name], value, f"{file}: {spelled(name)}")
        if file is not None:
            found[name] = _beside(file, found[name], name)
    for name, value in typed.items():
        option = OPTIONS[name]
        if isinstance(value, str):
            value = option.typed(value)
        found[name] = _checked(option, value, "FEED" if name == FEED else f"--{spelled(name)}")
    settings = Settings(**found)
    if (settings.certificate_file is None) != (settings.key_file is None):
        raise SettingError("certificate-file and key-file: give both or none of the two")
    return settings


def _checked(option: Option, value: object, where: str) -> Any:
    try:
        return option.check(value)
    except ValueError as error:
        raise SettingError(f"{where}: {shown(value)} is not {error}") from None


def _beside(file: Path, value: Any, name: str) -> Any:
    """Return what a file says, paths taken from the folder of the file."""
    if name == FEED and value != STANDARD_INPUT and "://" not in value:
        return str(file.parent / value)
    return file.parent / value if isinstance(value, Path) else value


def changed(before: Settings, after: Settings) -> tuple[list[str], list[str]]:
    """Return the names of settings that differ: those that may change live, and the others."""
    differ = [name for name in OPTIONS if getattr(before, name) != getattr(after, name)]
    live = [name for name in differ if OPTIONS[name].live]
    return live, [name for name in differ if name not in live]
