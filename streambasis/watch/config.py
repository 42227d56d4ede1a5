"""Settings from a TOML file: bounded, parsed and never evaluated, every key known or refused."""

from __future__ import annotations

import difflib
import re
import stat
import tomllib
from pathlib import Path
from typing import Any

from streambasis.errors import SettingError
from streambasis.watch.options import OPTIONS, spelled

MOST_BYTES = 1 << 19
"""Bytes of a file that are read: room for the names of ten thousand channels."""

# the time that the parser takes grows with the square of the parts of a key; no setting has two
_LONG_KEY = re.compile(
    r"""(?<![\w-])(?:(?:[\w-]+|"[^"\n]*"|'[^'\n]*')[ \t]*\.[ \t]*){100}""", re.ASCII
)

_SECRET = ("user", "username", "password", "passwd", "secret", "token")


def read_config(path: Path) -> dict[str, Any]:
    """Return what a file says, by the names of the fields of ``Settings``.

    Parameters
    ----------
    path : Path
        A TOML file whose keys are the long options without the dashes in front, and ``feed``.

    Returns
    -------
    dict
        The values as TOML holds them; nothing but the keys is checked.

    Raises
    ------
    SettingError
        If the file cannot be read, is no TOML, or holds a key that is no setting; the message
        names the file, the line or the key, and the nearest key there is.
    """
    text = _text_of(path)
    if _LONG_KEY.search(text):
        raise SettingError(f"{path}: holds a key of a hundred parts; a setting has one")
    try:
        document = tomllib.loads(text)
    except RecursionError:
        raise SettingError(f"{path}: not a TOML file (nested too deeply)") from None
    except ValueError as error:
        # beside its own error: dates that do not exist, numbers of thousands of digits
        reason = " ".join(str(error).split())[:200]
        raise SettingError(f"{path}: not a TOML file ({reason})") from None
    found: dict[str, Any] = {}
    for key, value in document.items():
        name = _field(path, key)
        if name in found:
            raise SettingError(f"{path}: {spelled(name)} stands there twice, once as {key}")
        found[name] = value
    return found


def _text_of(path: Path) -> str:
    try:
        # a pipe would never end, and could not be read again
        if not stat.S_ISREG(path.stat().st_mode):
            raise SettingError(f"{path}: not a file")
        with path.open("rb") as file:
            data = file.read(MOST_BYTES + 1)
    except OSError as error:
        raise SettingError(f"{path}: cannot be read ({error.strerror or error})") from None
    if len(data) > MOST_BYTES:
        raise SettingError(f"{path}: longer than the {MOST_BYTES} bytes that settings may take")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise SettingError(f"{path}: not UTF-8 text (byte {error.start})") from None


def _field(path: Path, key: str) -> str:
    """Return the field that a key stands for."""
    known = {spelled(name): name for name in OPTIONS}
    wanted = key.replace("_", "-")
    if wanted in known:
        return known[wanted]
    if wanted.lower() in _SECRET:
        raise SettingError(
            f"{path}: {key}: names and passwords do not belong here; set credentials to a file "
            "that holds the two, or use the environment"
        )
    near = difflib.get_close_matches(wanted.lower()[:100], known, n=1, cutoff=0.5)
    advice = f"did you mean {near[0]!r}?" if near else f"there are {', '.join(known)}"
    shown = key if key.isprintable() and len(key) <= 100 else ascii(key[:100])
    raise SettingError(f"{path}: no setting {shown!r} ({advice})")
