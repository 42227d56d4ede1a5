"""Malformed rows of a run: counted, the first shown, kept aside once and in bounded space."""

from __future__ import annotations

import json
from pathlib import Path

import pyarrow.parquet as pq
import pytest
from runs import Watched, results, write_feed

from streambasis.errors import FeedError, HomeError
from streambasis.watch import home as home_module
from streambasis.watch.home import Home

ROWS = 12_000
TORN = 100


@pytest.fixture(scope="module")
def feed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a feed of which every hundredth row is torn."""
    return write_feed(tmp_path_factory.mktemp("feed") / "feed.csv", ROWS, torn=TORN)


def in_parts(feed: Path, folder: Path, batches: int) -> list[Watched]:
    """Run in parts of so many batches."""
    parts: list[Watched] = []
    while not parts or parts[-1].asked.is_set():
        left = [batches]

        def after(samples: int, left: list[int] = left) -> None:
            del samples
            left[0] -= 1
            if left[0] == 0:
                parts[-1].asked.set()

        parts.append(Watched(feed, folder, after))
        parts[-1]()
    return parts


def test_every_malformed_row_is_kept_once(feed: Path, tmp_path: Path) -> None:
    """In one part or in several, the file holds each row with its line, in order."""
    Watched(feed, tmp_path / "whole")()
    parts = in_parts(feed, tmp_path / "parts", 3)
    assert len(parts) > 3
    assert results(tmp_path / "parts") == results(tmp_path / "whole")
    text = (tmp_path / "whole" / "malformed.jsonl").read_text()
    rows = [json.loads(line) for line in text.splitlines()]
    assert [row["number"] for row in rows] == list(range(2, ROWS + 2, TORN))
    lines = feed.read_text().splitlines()
    assert all(row["text"] == lines[row["number"] - 1] for row in rows)
    assert {row["source"] for row in rows} == {str(feed)}
    assert parts[-1].vitals.malformed == ROWS // TORN
    assert parts[-1].vitals.samples == ROWS - ROWS // TORN
    assert parts[-1].vitals.restarts == len(parts) - 1


def test_the_first_ten_are_shown_with_their_lines(feed: Path, tmp_path: Path) -> None:
    """Ten in all, over all parts of the run; the last of them says that it is the last."""
    parts = in_parts(feed, tmp_path / "home", 1)
    shown = [warning for part in parts for warning in part.ear.warnings]
    numbers = [2 + TORN * i for i in range(10)]
    assert [w.split(": ")[0] for w in shown[:10]] == [f"{feed}, line {n}" for n in numbers]
    assert "not shown" in shown[10]
    assert len(shown) == 11


def test_a_strict_feed_ends_at_the_first(feed: Path, tmp_path: Path) -> None:
    """The error names file and line."""
    with pytest.raises(FeedError, match=r"feed\.csv, line 2: "):
        Watched(feed, tmp_path / "home", strict=True)()


def test_the_file_is_bounded(feed: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What came first is kept, all are counted, and a run in parts keeps the same."""
    monkeypatch.setattr(home_module, "MOST_MALFORMED", 5000)
    watched = Watched(feed, tmp_path / "whole")()
    in_parts(feed, tmp_path / "parts", 3)
    kept = (tmp_path / "whole" / "malformed.jsonl").read_bytes()
    assert 4000 < len(kept) <= 5000
    assert kept.endswith(b"}\n")
    assert watched.vitals.malformed == ROWS // TORN > kept.count(b"\n")
    assert (tmp_path / "parts" / "malformed.jsonl").read_bytes() == kept


def test_decisions_as_parquet_are_those_as_arrow(feed: Path, tmp_path: Path) -> None:
    """The same table in the other format, whole or in parts; the two are never mixed."""
    Watched(feed, tmp_path / "arrow")()
    Watched(feed, tmp_path / "parquet", decisions="parquet")()
    names = sorted(path.stem for path in (tmp_path / "arrow" / "decisions").glob("*.arrow"))
    files = sorted((tmp_path / "parquet" / "decisions").iterdir())
    assert [path.name for path in files] == [f"{name}.parquet" for name in names]
    for file in files:
        arrow = tmp_path / "arrow" / "decisions" / f"{file.stem}.arrow"
        with home_module.pa.ipc.open_file(arrow) as expected:
            assert pq.read_table(file).equals(expected.read_all())
    with pytest.raises(HomeError, match="kept as parquet, not arrow"):
        Home(tmp_path / "parquet")
    with pytest.raises(HomeError, match="one of arrow, parquet"):
        Home(tmp_path / "new", "csv")
