"""One report of all that was measured, as Markdown and as JSON, and the README's part of it."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path

from bench.harness import Table, as_json

BEGIN, END = "<!-- bench: begin -->", "<!-- bench: end -->"
"""Marks of the README between which the headline tables stand."""


def write_report(
    machine: Mapping[str, str], results: Mapping[str, Sequence[Table]], folder: Path
) -> list[Path]:
    """Write ``report.md`` and ``report.json``; return both.

    Parameters
    ----------
    machine : mapping of str to str
        What the figures were measured on.
    results : mapping of str to sequence of Table
        The tables of each question, in the order in which they are shown.
    folder : Path
        Made where it does not exist.
    """
    folder.mkdir(parents=True, exist_ok=True)
    lines = ["# What was measured", "", measured_on(machine), ""]
    for question, tables in results.items():
        lines += [f"## {question}", ""]
        for table in tables:
            lines += [table.markdown(), ""]
    text, data = folder / "report.md", folder / "report.json"
    text.write_text("\n".join(lines))
    content = {"machine": dict(machine), "results": {q: as_json(t) for q, t in results.items()}}
    data.write_text(json.dumps(content, indent=1) + "\n")
    return [text, data]


def measured_on(machine: Mapping[str, str]) -> str:
    """Return a sentence that says where and when the figures were read."""
    versions = ", ".join(
        f"{name} {machine[name]}" for name in ("python", "numpy", "numba", "scipy")
    )
    return (
        f"Read on {machine['date']} on {machine['cores']} cores of {machine['processor']} with "
        f"{versions}. All sides of a comparison take turns in one process, on one BLAS thread; "
        "figures are medians."
    )


def write_headlines(
    machine: Mapping[str, str], results: Mapping[str, Sequence[Table]], readme: Path
) -> None:
    """Replace what stands between the marks of a README by the headline tables.

    Raises
    ------
    ValueError
        If the file lacks the marks, or no table is a headline.
    """
    text = readme.read_text()
    before, begin, rest = text.partition(BEGIN)
    _, end, after = rest.partition(END)
    if not (begin and end):
        raise ValueError(f"{readme}: the lines {BEGIN} and {END} are missing")
    headlines = [table for tables in results.values() for table in tables if table.headline]
    if not headlines:
        raise ValueError(f"none of {', '.join(results)} has a headline table")
    parts = [BEGIN, measured_on(machine), *(table.markdown() for table in headlines), END]
    readme.write_text(before + "\n\n".join(parts) + after)
