"""Malformed rows: passed over, counted, reported with their lines; or an error, when strict."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from streambasis.errors import FeedError
from streambasis.feeds import BATCH_ROWS, Batch, FeedOptions, Malformed, open_feed
from streambasis.feeds.lines import LONGEST_LINE
from streambasis.feeds.reading import MOST_TEXT, OUTNUMBERED
from streambasis.feeds.sources import CHUNK_BYTES

LENIENT = FeedOptions(strict=False)


def read(path: Path) -> tuple[list[Batch], list[Malformed]]:
    """Return the batches of a lenient feed and the malformed rows in them."""
    batches = list(open_feed(path, options=LENIENT).batches())
    return batches, [row for batch in batches for row in batch.malformed]


CSV = [
    ("2026-03-02T00:00:00,1", "3 columns expected, 2 found"),
    ("2026-03-02T00:00:00,1,2,3", "3 columns expected, 4 found"),
    ("2026-03-02T00:00:00,ERR,2", "column 'a': invalid value 'ERR'"),
    ("2026-03-02T00:00:00,1,true", "column 'b': invalid value 'true'"),
    ("2026-03-02T00:00:00,1,1_000", "cannot be parsed"),
    ("2026-03-02T00:00:00,1,0x1p3", "column 'b': invalid value '0x1p3'"),
    ("yesterday,1,2", "column 'time': invalid value 'yesterday'"),
    (",1,2", "the time is missing (column 'time')"),
    ("2026-03-02T00:00:00,inf,2", "column 'a': the value is not finite"),
    ("2026-03-02T00:00:00,1,-1e400", "column 'b': the value is not finite"),
    ('2026-03-02T00:00:00,"1,2', "3 columns expected, 2 found"),
    ("\x00\x01\x02", "3 columns expected, 1 found"),
    ("x" * 100_000, "3 columns expected, 1 found"),
    ("2026-03-02T00:00:00,1\r,2", "cannot be parsed"),
]


@pytest.mark.parametrize(("row", "reason"), CSV, ids=[c[1] + c[0][-9:] for c in CSV])
def test_a_malformed_row_of_csv_is_passed_over(tmp_path: Path, row: str, reason: str) -> None:
    """Rows around it are taken; its line, reason and text are reported."""
    path = tmp_path / "feed.csv"
    path.write_bytes(
        b"time,a,b\n2026-03-02T00:00:01,1,2\n\n" + row.encode() + b"\n2026-03-02T00:00:02,3,4\n"
    )
    (batch,), (fault,) = read(path)
    assert batch.values.tolist() == [[1.0, 2.0], [3.0, 4.0]]
    assert (fault.source, fault.number, fault.reason) == (str(path), 4, reason)
    assert fault.text[:20] == "".join(c if c.isprintable() else ascii(c)[1:-1] for c in row)[:20]
    assert len(fault.text) <= MOST_TEXT
    with pytest.raises(FeedError, match=r"line 4: "):
        list(open_feed(path, options=FeedOptions(strict=True)).batches())


JSON = [
    ('{"time": 1, "a": "2"}', "'a': invalid value '2'"),
    ('{"time": 1, "a": true}', "'a': invalid value True"),
    ('{"time": 1, "a": [1]}', "'a': invalid value [1]"),
    ('{"time": 1, "a": Infinity}', "'a': the value is not finite"),
    ('{"time": 1, "a": 1e999}', "'a': the value is not finite"),
    ('{"time": 1, "a": ' + "9" * 400 + "}", "'a': the value is not finite"),
    ('{"time": 1, "a": ' + "9" * 5000 + "}", "no JSON (ValueError)"),
    ('{"a": 1}', "the time is missing ('time')"),
    ('{"time": true, "a": 1}', "the time True cannot be read"),
    ('{"time": NaN, "a": 1}', "the time is no number of seconds within 292 years"),
    ('{"time": 1e30, "a": 1}', "the time is no number of seconds within 292 years"),
    ('{"time": "noon", "a": 1}', "the time 'noon' cannot be read"),
    ('{"time": 1, "c": 1}', "none of the channels is in it"),
    ("[" * 200_000, "nested too deeply"),
    ("[1, 2]", "no JSON object of channel values"),
    ('{"time": 1, "a": ', "no JSON (Expecting value)"),
    ("__import__('os').abort()", "no JSON (Expecting value)"),
]


@pytest.mark.parametrize(("row", "reason"), JSON, ids=[c[1] + c[0][-9:] for c in JSON])
def test_a_malformed_line_of_json_is_passed_over(tmp_path: Path, row: str, reason: str) -> None:
    """Rows around it are taken; its line, reason and text are reported."""
    path = tmp_path / "feed.jsonl"
    path.write_text(f'{{"time": 1, "a": 1, "b": null}}\n\n{row}\n{{"time": 2.5, "b": 4}}\n')
    (batch,), (fault,) = read(path)
    np.testing.assert_array_equal([[1.0, np.nan], [np.nan, 4.0]], batch.values)
    assert batch.times is not None
    assert batch.times.tolist() == [1_000_000_000, 2_500_000_000]
    assert (fault.number, fault.reason, fault.text) == (3, reason, row[:MOST_TEXT])
    with pytest.raises(FeedError, match=r"line 3: "):
        list(open_feed(path).batches())


@pytest.mark.parametrize("ending", ["parquet", "arrow"])
def test_malformed_rows_of_binary_files_are_told_by_their_row(tmp_path: Path, ending: str) -> None:
    """A time that is missing or out of range, and an infinite value, cost one row each."""
    table = pa.table(
        {
            "time": pa.array([0, None, 2, 32_503_680_000, 4, 5], pa.timestamp("s")),
            "a": pa.array([0.0, 1, 2, 3, np.inf, 5]),
        }
    )
    path = tmp_path / f"feed.{ending}"
    if ending == "parquet":
        pq.write_table(table, path)
    else:
        with pa.ipc.new_file(path, table.schema) as file:
            file.write_table(table)
    (batch,), faults = read(path)
    assert batch.values.tolist() == [[0.0], [2.0], [5.0]]
    assert [f.number for f in faults] == [2, 4, 5]
    with pytest.raises(FeedError, match="row 2: the time is missing"):
        list(open_feed(path).batches())


def test_a_line_without_end_is_never_held(tmp_path: Path) -> None:
    """A line longer than the limit is passed over; the lines behind it keep their numbers."""
    path = tmp_path / "feed.csv"
    for length in (LONGEST_LINE + 1, 3 * LONGEST_LINE):
        path.write_bytes(b"a\n1\n" + b"7" * (length - 1) + b"\n2\nbad\n")
        (batch,), faults = read(path)
        assert batch.values.tolist() == [[1.0], [2.0]]
        assert [(f.number, f.reason[:18]) for f in faults] == [
            (3, "the line is longer"),
            (5, "column 'a': invali"),
        ]
        assert batch.position["offset"] == path.stat().st_size


def test_numbers_of_lines_and_reports_survive_a_break(tmp_path: Path) -> None:
    """Over any break each malformed row is reported once, under its own line, and counted."""
    rng = np.random.default_rng(3)
    lines = [b"bad" if rng.random() < 0.2 else b"%d,1" % i for i in range(4 * BATCH_ROWS)]
    path = tmp_path / "feed.csv"
    path.write_bytes(b"a,b\n" + b"\n".join(lines) + b"\n")
    batches, faults = read(path)
    assert [f.number for f in faults] == [i + 2 for i, line in enumerate(lines) if line == b"bad"]
    assert [b.position["malformed"] for b in batches] == np.cumsum(
        [len(b.malformed) for b in batches]
    ).tolist()
    for done, before in enumerate(batches[:-1]):
        feed = open_feed(path, position=before.position, options=LENIENT)
        rest = list(feed.batches())
        assert [b.malformed for b in rest] == [b.malformed for b in batches[done + 1 :]]
        assert feed.counts == {"malformed": len(faults)}


def test_malformed_rows_are_held_in_bounded_number(tmp_path: Path) -> None:
    """A file without a single good row gives batches of nothing but malformed rows."""
    path = tmp_path / "feed.csv"
    path.write_bytes(b"a,b\n1,2\n" + b"not good\n" * (100 * BATCH_ROWS))
    batches = list(open_feed(path, options=LENIENT).batches())
    assert sum(len(b) for b in batches) == 1
    assert sum(len(b.malformed) for b in batches) == 100 * BATCH_ROWS
    block = CHUNK_BYTES // len(b"not good\n") + 1
    assert max(len(b.malformed) for b in batches) <= OUTNUMBERED * BATCH_ROWS + block


def test_malformed_rows_do_not_move_the_boundaries_of_batches(tmp_path: Path) -> None:
    """With three rows of four malformed, batches still end where the sample number divides."""
    path = tmp_path / "feed.csv"
    path.write_bytes(b"a,b\n" + b"1,2\nbad\nbad\nbad\n" * (5 * BATCH_ROWS))
    batches, faults = read(path)
    assert [len(b) for b in batches] == [BATCH_ROWS] * 5
    assert len(faults) == 15 * BATCH_ROWS


def test_odd_words_in_the_first_rows_do_not_make_a_column_text(tmp_path: Path) -> None:
    """The type of a column is what most of its values have."""
    path = tmp_path / "feed.csv"
    path.write_text("time,a,state\n2026-03-02,ERR,on\n2026-03-03,1,on\nnever,2,on\n2026-03-04,3,\n")
    feed = open_feed(path, channels=["a"], options=LENIENT)
    (batch,) = feed.batches()
    assert feed.columns.time == "time"
    assert batch.values.tolist() == [[1.0], [3.0]]
    with pytest.raises(FeedError, match="column 'state' is not numeric"):
        open_feed(path, options=LENIENT)
