"""A report from a folder to a page, or to pictures."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from pathlib import Path

from streambasis.errors import HomeError
from streambasis.files import replace_file, write_all
from streambasis.report.canvas import COLUMNS
from streambasis.report.page import page
from streambasis.report.pictures import Picture, pictures
from streambasis.report.reading import read_run

READABLE = 0o644


def make_report(
    home: Path, *, out: Path | None, png: Path | None, caution: str, made: dt.datetime
) -> list[str]:
    """Read a run and write its report.

    Parameters
    ----------
    home : Path
        The folder that ``watch --home`` wrote; nothing in it changes.
    out : Path, optional
        Where the page goes.
    png : Path, optional
        A folder for the pictures, one PNG file each; made where it does not exist.
    caution : str
        What the product is not; stands on the page.
    made : datetime
        When the report is made.

    Returns
    -------
    list of str
        What was written and what was left out, one line each.

    Raises
    ------
    RecordError
        If the folder holds no run, or its decisions cannot be read.
    HomeError
        If the report cannot be written.
    """
    run = read_run(home, COLUMNS)
    drawn = list(pictures(run))
    lines: list[str] = []
    if png is not None:
        lines += _write_pictures(png, drawn)
    if out is not None:
        _write(out, page(run, drawn, caution, made))
        lines.append(f"{out}: {sum(p.png is not None for p in drawn)} pictures, "
                     f"{len(run.events):,} events")  # fmt: skip
    lines += [f"left out: {p.title}. {p.text}" for p in drawn if p.png is None]
    return lines + [f"note: {note}" for note in run.notes]


def _write_pictures(folder: Path, drawn: list[Picture]) -> Iterator[str]:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _unwritten(folder, error) from None
    for picture in drawn:
        if picture.png is not None:
            path = folder / f"{picture.name}.png"
            _write(path, picture.png)
            yield f"{path}: {picture.title}"


def _write(path: Path, data: bytes) -> None:
    try:
        replace_file(path, lambda descriptor: write_all(descriptor, data), mode=READABLE)
    except OSError as error:
        raise _unwritten(path, error) from None


def _unwritten(path: Path, error: OSError) -> HomeError:
    return HomeError(f"{path}: cannot be written ({error.strerror or error})")
