"""Feeds: the same samples from every format, bounded memory, and errors that name the way out."""

from __future__ import annotations

import re
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq
import pytest

from streambasis import StreambasisError
from streambasis.errors import FeedError
from streambasis.feeds import BATCH_ROWS, Batch, open_feed
from streambasis.feeds.sources import CHUNK_BYTES

ROWS = 10_001


def to_csv(table: pa.Table, path: Path) -> None:
    """Write a table as CSV."""
    pc.write_csv(table, path)


def to_parquet(table: pa.Table, path: Path) -> None:
    """Write a table as Parquet with row groups that no batch boundary meets."""
    pq.write_table(table, path, row_group_size=777)


def to_arrow_file(table: pa.Table, path: Path) -> None:
    """Write a table as an Arrow IPC file."""
    with pa.ipc.new_file(path, table.schema) as file:
        file.write_table(table, max_chunksize=1234)


def to_arrow_stream(table: pa.Table, path: Path) -> None:
    """Write a table as an Arrow IPC stream."""
    with pa.ipc.new_stream(path, table.schema) as stream:
        stream.write_table(table, max_chunksize=9999)


WRITERS: dict[str, Callable[[pa.Table, Path], None]] = {
    "csv": to_csv,
    "parquet": to_parquet,
    "arrow": to_arrow_file,
    "arrows": to_arrow_stream,
}


def table_of(rows: int = ROWS) -> pa.Table:
    """Return a table of timestamps and three channels of different types, with gaps."""
    rng = np.random.default_rng(4)
    speed = rng.standard_normal(rows)
    return pa.table(
        {
            "time": pa.array(
                np.datetime64("2026-03-02T00:00:00", "ms") + np.arange(rows) * 250,
                pa.timestamp("ms"),
            ),
            "speed": pa.array(speed, mask=np.arange(rows) % 100 == 7),
            "count": pa.array(np.arange(rows)),
            "temp": pa.array(np.round(speed * 3, 2).astype(np.float32).astype(float)),
        }
    )


def read_all(path: Path, **options: object) -> tuple[np.ndarray, np.ndarray | None, list[int]]:
    """Return all values, all times, and the number of the first sample of every batch."""
    batches: list[Batch] = list(open_feed(path, **options).batches())  # type: ignore[arg-type]
    times = None if batches[0].times is None else np.concatenate([b.times for b in batches])
    return np.concatenate([b.values for b in batches]), times, [b.first for b in batches]


def text_file(folder: Path, text: str, name: str = "feed.csv") -> Path:
    """Write text to a file and return its path."""
    path = folder / name
    path.write_text(text)
    return path


@pytest.mark.parametrize("ending", WRITERS)
def test_every_format_gives_the_same_samples_in_the_same_batches(
    tmp_path: Path, ending: str
) -> None:
    """Values, NaN for nulls, times in nanoseconds and batch boundaries do not depend on format."""
    table = table_of()
    path = tmp_path / f"feed.{ending}"
    WRITERS[ending](table, path)
    feed = open_feed(path)
    values, times, firsts = read_all(path)
    expected = np.column_stack(
        [table[name].to_numpy().astype(float) for name in ("speed", "count", "temp")]
    )
    assert feed.columns.channels == ("speed", "count", "temp")
    np.testing.assert_array_equal(expected, values)
    np.testing.assert_array_equal(
        table["time"].to_numpy().astype("datetime64[ns]").astype(np.int64), times
    )
    assert firsts == list(range(0, ROWS, BATCH_ROWS))


@pytest.mark.parametrize("ending", WRITERS)
def test_channels_come_in_the_order_asked_for(tmp_path: Path, ending: str) -> None:
    """Only the channels asked for are read, in that order, beside the time."""
    path = tmp_path / f"feed.{ending}"
    WRITERS[ending](table_of(50), path)
    values, times, _ = read_all(path, channels=["count", "speed"])
    np.testing.assert_array_equal(np.arange(50), values[:, 0])
    assert times is not None


@pytest.mark.parametrize("ending", ["csv", "parquet", "arrow"])
def test_number_of_samples_is_known_or_estimated(tmp_path: Path, ending: str) -> None:
    """A feed says how many samples to expect, to a tenth, before they are read."""
    path = tmp_path / f"feed.{ending}"
    WRITERS[ending](table_of(), path)
    rows = open_feed(path).rows
    assert rows is not None
    assert abs(rows - ROWS) <= 0.1 * ROWS


def test_format_is_told_by_content_not_by_name(tmp_path: Path) -> None:
    """A Parquet file without an ending is read as what it is."""
    path = tmp_path / "feed"
    to_parquet(table_of(10), path)
    assert open_feed(path).columns.time == "time"


@pytest.mark.parametrize(
    ("header", "first", "nanoseconds"),
    [
        ("time,a", "2026-03-02T00:00:01", 1_772_409_601_000_000_000),
        ("timestamp,a", "2026-03-02 00:00:01.5", 1_772_409_601_500_000_000),
        ("when,a", "2026-03-02T01:00:01+01:00", 1_772_409_601_000_000_000),
        ("Date,a", "2026-03-02", 1_772_409_600_000_000_000),
        ("Time [s],a", "12", 12_000_000_000),
        ("time_ms,a", "12.5", 12_500_000),
        ("epoch,a", "1772409601.25", 1_772_409_601_250_000_000),
        ("unix_time,a", "-3", -3_000_000_000),
    ],
)
def test_the_obvious_time_column_is_found(
    tmp_path: Path, header: str, first: str, nanoseconds: int
) -> None:
    """A timestamp of any notation, or a number under a name of a time, becomes nanoseconds."""
    path = text_file(tmp_path, f"{header}\n{first},1\n{first},2\n")
    values, times, _ = read_all(path)
    assert times is not None
    assert times.tolist() == [nanoseconds, nanoseconds]
    assert values.tolist() == [[1.0], [2.0]]


def test_a_feed_without_a_time_column_has_no_times(tmp_path: Path) -> None:
    """Channels whose names merely contain the word time stay channels."""
    path = text_file(tmp_path, "cycle_time,uptime\n1,2\n")
    values, times, _ = read_all(path)
    assert times is None
    assert values.tolist() == [[1.0, 2.0]]


def test_later_fractions_do_not_break_a_column_that_began_with_whole_numbers(
    tmp_path: Path,
) -> None:
    """Types are never fixed by the first block: integers for many blocks, then 0.5."""
    rows = "".join(f"{i},{i % 7}\n" for i in range(200_000))
    path = text_file(tmp_path, f"time,a\n{rows}200000.5,0.5\n")
    values, times, _ = read_all(path)
    assert len(rows) > 6 * CHUNK_BYTES
    assert values[-1, 0] == 0.5
    assert times is not None
    assert times[-1] == 200_000_500_000_000


@pytest.mark.parametrize("separator", [",", ";", "\t"])
@pytest.mark.parametrize("ending", ["\n", "\r\n"])
def test_separators_line_ends_quotes_and_gaps(tmp_path: Path, separator: str, ending: str) -> None:
    """Comma, semicolon and tab, Unix and Windows lines, quoted names, empty fields, NA words."""
    lines = [["time", '"a"', "b"], ["1", "2", ""], ["2", "NA", "4e-3"], ["3", "nan", " 5"]]
    path = tmp_path / "feed.csv"
    path.write_bytes(ending.join(separator.join(line) for line in lines).encode("utf-8-sig"))
    values, _, _ = read_all(path)
    np.testing.assert_array_equal([[2, np.nan], [np.nan, 0.004], [np.nan, 5]], values)


REFUSED = [
    ("a,b\n1,2\n", {"channels": ["a", "bb"]}, "no column 'bb' (did you mean 'b'?); it has a, b"),
    ("a,b\n1,2\n", {"channels": ["a", "a"]}, "channel 'a' is asked for twice"),
    ("a,b\n1,2\n", {"channels": ["a"], "time": "a"}, "column 'a' is the time and cannot also"),
    ("a,b\n1,2\n", {"time": "zeit"}, "no column 'zeit'; it has a, b"),
    ("a,b,a\n1,2,3\n", {}, "2 columns are named 'a'; names must be distinct"),
    ("a,,b\n1,2,3\n", {}, "column 2 has no name"),
    ("time,date,a\n1,2,3\n", {}, "several columns could be the time (time, date): name one"),
    ("time\n1\n", {}, "no channel beside the time column 'time'"),
    ("a,state\n1,on\n", {}, "column 'state' is not numeric (text)"),
    ("a,on\n1,true\n", {}, "column 'on' is not numeric (text)"),
    ("time,a\nMonday,1\n", {}, "time column 'time' cannot be read (text)"),
    ("time,a\n1,1\n,2\n", {}, "line 3: the time is missing (column 'time')"),
    ("time,a\n1e300,1\n", {}, "the time is no number of seconds within 292 years"),
    ("a,b\n", {}, "no samples; the file holds column names and nothing else"),
    ("1,2\n3,4\n", {}, "the first line holds numbers; it should hold column names"),
    ("\n1,2\n", {}, "the first line is blank"),
    ("", {}, "the file is empty"),
    ("a,b\n1,2\n3\n", {}, "line 3: 2 columns expected, 1 found"),
]


@pytest.mark.parametrize(("text", "options", "message"), REFUSED, ids=[r[2][:40] for r in REFUSED])
def test_what_cannot_be_read_is_named(
    tmp_path: Path, text: str, options: dict[str, object], message: str
) -> None:
    """Each refusal is a FeedError that begins with the file and says what is wrong."""
    path = text_file(tmp_path, text)
    with pytest.raises(FeedError) as caught:
        read_all(path, **options)
    assert str(caught.value).startswith(str(path))
    assert message in str(caught.value)
    assert isinstance(caught.value, ValueError | StreambasisError)


def test_text_among_numbers_is_named_with_line_and_column(tmp_path: Path) -> None:
    """A word far behind the first block is reported by line, column and value."""
    rows = ["1.5,2"] * 100_000
    rows[90_000] = "1.5,broken"
    path = text_file(tmp_path, "\n".join(["a,b", *rows]) + "\n")
    with pytest.raises(FeedError, match=r"line 90002: column 'b': invalid value 'broken'"):
        read_all(path)


def test_doubled_names_that_nobody_asks_for_do_no_harm(tmp_path: Path) -> None:
    """Two columns of one name are no obstacle while other columns are chosen."""
    path = text_file(tmp_path, "x,x,a\n1,2,3\n")
    assert read_all(path, channels=["a"])[0].tolist() == [[3.0]]


def test_missing_file_and_folder_are_named(tmp_path: Path) -> None:
    """A path without a file behind it, and a folder with none in it, are named."""
    with pytest.raises(FeedError, match=re.escape(f"{tmp_path / 'none.csv'}: no such file")):
        open_feed(tmp_path / "none.csv")
    with pytest.raises(FeedError, match="a folder without files"):
        open_feed(tmp_path)


@pytest.mark.parametrize("ending", ["parquet", "arrow", "arrows"])
def test_a_truncated_binary_file_is_called_damaged(tmp_path: Path, ending: str) -> None:
    """Half a file is refused by name, when opened or while read."""
    path = tmp_path / f"feed.{ending}"
    WRITERS[ending](table_of(2000), path)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(FeedError, match=rf"{re.escape(str(path))}: damaged"):
        read_all(path)


def test_a_name_that_promises_another_format_is_pointed_out(tmp_path: Path) -> None:
    """Text in a file named .parquet, and binary content in a .csv, are refused."""
    with pytest.raises(FeedError, match="named like Parquet, but its content is not"):
        open_feed(text_file(tmp_path, "a,b\n1,2\n", "feed.parquet"))
    packed = tmp_path / "feed.csv"
    packed.write_bytes(bytes(range(256)))
    with pytest.raises(FeedError, match=r"binary content"):
        open_feed(packed)


def test_memory_does_not_grow_with_the_file(tmp_path: Path) -> None:
    """Arrow's peak allocation while reading 128 MB of text is that of reading 16 MB, nearly."""
    code = (
        "import sys, pyarrow\n"
        "from streambasis.feeds import open_feed\n"
        "n = sum(len(b) for b in open_feed(sys.argv[1]).batches())\n"
        "print(n, pyarrow.default_memory_pool().max_memory() >> 20)\n"
    )
    peaks = {}
    line = ",".join(["0.12345"] * 20) + "\n"
    for rows in (100_000, 800_000):
        path = tmp_path / f"{rows}.csv"
        path.write_text(",".join(f"c{i}" for i in range(20)) + "\n" + line * rows)
        shown = subprocess.run(
            [sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True
        )
        count, peaks[rows] = (int(word) for word in shown.stdout.split())
        assert count == rows
    assert peaks[800_000] - peaks[100_000] < 24
