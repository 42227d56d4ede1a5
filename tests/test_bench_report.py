"""What ``python -m bench`` writes: one report, and the README's part of it."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from bench.harness import Table, machine
from bench.report import BEGIN, END, write_headlines, write_report


def results() -> dict[str, list[Table]]:
    """Return two questions with a table each, of which one is a headline."""
    fast = Table("How fast", ["channels", "ratio"], headline=True)
    fast.add(8, 3.14159)
    kept = Table("How large", ["bytes"], notes=["Counted by hand."])
    kept.add(12_345.0)
    return {"speed": [fast], "size": [kept]}


def test_a_report_holds_every_table_and_the_machine(tmp_path: Path) -> None:
    """The Markdown shows every table; the JSON holds the same with the figures in full."""
    text, data = write_report(machine(), results(), tmp_path / "new")
    shown = text.read_text()
    for part in ("## speed", "| 8 | 3.14 |", "## size", "| 12,345 |", "Counted by hand."):
        assert part in shown
    written = json.loads(data.read_text())
    assert written["machine"] == machine()
    assert written["results"]["speed"][0]["rows"] == [[8, 3.14159]]


def test_headlines_replace_what_stood_between_the_marks(tmp_path: Path) -> None:
    """Only headline tables go to the README, and the text around the marks stays."""
    readme = tmp_path / "README.md"
    readme.write_text(f"before\n{BEGIN}\nold\n{END}\nafter\n")
    write_headlines(machine(), results(), readme)
    first = readme.read_text()
    assert first.startswith(f"before\n{BEGIN}\n")
    assert first.endswith(f"{END}\nafter\n")
    assert "How fast" in first
    assert "How large" not in first
    assert "old" not in first
    write_headlines(machine(), results(), readme)
    assert readme.read_text() == first


@pytest.mark.parametrize("text", ["", f"{BEGIN} only", f"{END} before {BEGIN}"])
def test_a_readme_without_marks_stays_as_it_was(tmp_path: Path, text: str) -> None:
    """Without both marks, in their order, nothing is written and the error names them."""
    readme = tmp_path / "README.md"
    readme.write_text(text)
    with pytest.raises(ValueError, match="bench: end"):
        write_headlines(machine(), results(), readme)
    assert readme.read_text() == text


def test_no_headline_is_an_error(tmp_path: Path) -> None:
    """Questions without a headline table do not empty the README."""
    readme = tmp_path / "README.md"
    readme.write_text(f"{BEGIN}{END}")
    with pytest.raises(ValueError, match="size has a headline"):
        write_headlines(machine(), {"size": results()["size"]}, readme)
