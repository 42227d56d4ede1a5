"""Going on from a position: no sample lost, none twice, the same batches as without a break."""

from __future__ import annotations

import gzip
import io
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq
import pytest

from streambasis.errors import FeedError
from streambasis.feeds import BATCH_ROWS, Batch, FeedOptions, Position, open_feed

ROWS = 5000


def table_of(rows: int = ROWS, seed: int = 1) -> pa.Table:
    """Return a table of a time in nanoseconds and two channels."""
    rng = np.random.default_rng(seed)
    return pa.table(
        {
            "time_ns": 1_772_409_601_000_000_007 + np.arange(rows) * 1_000_003,
            "a": rng.standard_normal(rows),
            "b": pa.array(rng.standard_normal(rows), mask=rng.random(rows) < 0.01),
        }
    )


def csv_bytes(table: pa.Table) -> bytes:
    """Return a table as CSV."""
    out = io.BytesIO()
    pc.write_csv(table, out)
    return out.getvalue()


def json_bytes(table: pa.Table) -> bytes:
    """Return a table as JSON lines."""
    return b"".join(json.dumps(row).encode() + b"\n" for row in table.to_pylist())


def stream_bytes(table: pa.Table) -> bytes:
    """Return a table as an Arrow IPC stream."""
    out = io.BytesIO()
    with pa.ipc.new_stream(out, table.schema) as stream:
        stream.write_table(table, max_chunksize=700)
    return out.getvalue()


def make(folder: Path, kind: str) -> Path:
    """Write the table in one of the forms that can be gone back to."""
    table = table_of()
    path = folder / f"feed.{kind}"
    if kind == "csv":
        path.write_bytes(csv_bytes(table))
    elif kind == "csv.gz":
        # two members, as appending to a packed file makes them
        whole = csv_bytes(table)
        path.write_bytes(gzip.compress(whole[:50_000]) + gzip.compress(whole[50_000:]))
    elif kind == "jsonl":
        path.write_bytes(json_bytes(table))
    elif kind == "parquet":
        pq.write_table(table, path, row_group_size=900)
    elif kind == "arrow":
        with pa.ipc.new_file(path, table.schema) as file:
            file.write_table(table, max_chunksize=800)
    elif kind == "arrows":
        path.write_bytes(stream_bytes(table))
    else:
        path.mkdir()
        (path / ".hidden").write_text("not a feed")
        for number, (start, ending) in enumerate([(0, "csv"), (1300, "parquet"), (3333, "gz")]):
            stop = [1300, 3333, ROWS][number]
            part = table.slice(start, stop - start)
            file = path / f"{number:03}.{ending}"
            if ending == "parquet":
                pq.write_table(part, file)
            else:
                data = csv_bytes(part)
                file.write_bytes(gzip.compress(data) if ending == "gz" else data)
    return path


KINDS = ("csv", "csv.gz", "jsonl", "parquet", "arrow", "arrows", "folder")


def same(expected: list[Batch], actual: list[Batch]) -> None:
    """Compare batches bit for bit, positions included."""
    assert [(b.first, len(b), b.position) for b in expected] == [
        (b.first, len(b), b.position) for b in actual
    ]
    for one, other in zip(expected, actual, strict=True):
        assert one.values.tobytes() == other.values.tobytes()
        assert (one.times is None) == (other.times is None)
        assert one.times is None or one.times.tobytes() == other.times.tobytes()


@pytest.mark.parametrize("kind", KINDS)
def test_every_form_gives_the_same_samples(tmp_path: Path, kind: str) -> None:
    """Packed, in lines of JSON or over a folder of formats: same values, times, boundaries."""
    table = table_of()
    batches = list(open_feed(make(tmp_path, kind)).batches())
    assert [b.first for b in batches] == list(range(0, ROWS, BATCH_ROWS))
    np.testing.assert_array_equal(
        np.concatenate([b.values for b in batches]),
        np.column_stack([table[name].to_numpy() for name in "ab"]),
    )
    times = np.concatenate([b.times for b in batches if b.times is not None])
    np.testing.assert_array_equal(table["time_ns"].to_numpy(), times)


@pytest.mark.parametrize("kind", KINDS)
def test_the_feed_goes_on_behind_any_batch(tmp_path: Path, kind: str) -> None:
    """From each position, kept as JSON, the rest comes as it came without a break."""
    path = make(tmp_path, kind)
    whole = list(open_feed(path).batches())
    for done in range(1, len(whole) + 1):
        position = json.loads(json.dumps(whole[done - 1].position))
        with open_feed(path, position=position) as feed:
            same(whole[done:], list(feed.batches()))


@pytest.mark.parametrize("kind", ["csv", "csv.gz", "jsonl", "parquet", "arrow", "arrows"])
def test_another_file_is_refused(tmp_path: Path, kind: str) -> None:
    """A position in a file whose content has changed is an error that says so."""
    path = make(tmp_path, kind)
    position = next(iter(open_feed(path).batches())).position
    other = tmp_path / "other"
    other.mkdir()
    content = make(other, kind).read_bytes()
    table = table_of(seed=2)
    (other / "changed").mkdir()
    if kind in ("csv", "csv.gz"):
        content = csv_bytes(table)
        content = gzip.compress(content) if kind == "csv.gz" else content
    elif kind == "jsonl":
        content = json_bytes(table)
    elif kind == "arrows":
        content = stream_bytes(table.rename_columns(["time_ns", "a", "c"]))
    elif kind == "parquet":
        pq.write_table(table, other / "changed" / "feed")
        content = (other / "changed" / "feed").read_bytes()
    else:
        with pa.ipc.new_file(other / "changed" / "feed", table.schema) as file:
            file.write_table(table)
        content = (other / "changed" / "feed").read_bytes()
    path.write_bytes(content)
    with pytest.raises(FeedError, match="not the file that the run left off in"):
        list(open_feed(path, position=position).batches())


DAMAGED: list[Position] = [
    {},
    {"sample": -1, "malformed": 0, "kind": "lines"},
    {"sample": 1, "malformed": 0, "kind": "rows", "row": 1},
    {"sample": 1, "malformed": 0, "kind": "lines", "offset": "7", "checked": 0, "line": 1},
    {"sample": 1, "malformed": 0, "kind": "lines", "offset": 7, "checked": 2**40, "line": 1},
    {"sample": 1, "malformed": 0, "kind": "lines", "offset": 7, "checked": 7, "line": 1},
]


@pytest.mark.parametrize("position", DAMAGED)
def test_a_position_that_makes_no_sense_is_refused(tmp_path: Path, position: Position) -> None:
    """Nothing in a damaged position leads to reading from a wrong place."""
    path = make(tmp_path, "csv")
    with pytest.raises(FeedError, match=r"position|left off"):
        open_feed(path, position=position)


def test_a_file_that_grew_after_its_end_goes_on_there(tmp_path: Path) -> None:
    """A file read to its end, and longer in the next run, gives only what is new."""
    path = tmp_path / "feed.csv"
    path.write_text("a\n1\n2\n")
    (batch,) = open_feed(path).batches()
    path.write_text("a\n1\n2\n3\n")
    (rest,) = open_feed(path, position=batch.position).batches()
    assert (rest.first, rest.values.tolist()) == (2, [[3.0]])
    assert list(open_feed(path, position=rest.position).batches()) == []


def test_a_folder_goes_on_with_files_that_came_later(tmp_path: Path) -> None:
    """A file added behind the last one is taken up; a file that is gone is named."""
    (tmp_path / "1.csv").write_text("a\n1\n")
    (batch,) = open_feed(tmp_path).batches()
    (tmp_path / "2.csv").write_text("a\n2\n")
    (rest,) = open_feed(tmp_path, position=batch.position).batches()
    assert (rest.first, rest.values.tolist()) == (1, [[2.0]])
    (tmp_path / "1.csv").unlink()
    with pytest.raises(FeedError, match=r"left off in '1\.csv', which is not there"):
        open_feed(tmp_path, position=batch.position)


PROGRAM = """
import json, sys
from streambasis.feeds import FeedOptions, open_feed
position = json.loads(sys.argv[1])
feed = open_feed("-", position=position, options=FeedOptions(wait=None))
for batch in feed.batches():
    times = None if batch.times is None else batch.times.tolist()
    print(json.dumps([batch.first, batch.values.tobytes().hex(), times, batch.position]))
print(json.dumps([feed.live, feed.repeatable]))
"""


def from_standard_input(stdin: int | bytes, position: Position | None = None) -> list[list[object]]:
    """Run a program that reads standard input; return a list per batch and one of its flags."""
    given = {"input": stdin} if isinstance(stdin, bytes) else {"stdin": stdin}
    shown = subprocess.run(
        [sys.executable, "-c", PROGRAM, json.dumps(position)],
        capture_output=True,
        check=True,
        **given,  # type: ignore[arg-type]
    )
    return [json.loads(line) for line in shown.stdout.splitlines()]


@pytest.mark.parametrize("kind", ["csv", "csv.gz", "jsonl", "arrows"])
def test_a_pipe_gives_what_the_file_gives(tmp_path: Path, kind: str) -> None:
    """CSV, packed CSV, JSON lines and Arrow streams are told apart on standard input."""
    path = make(tmp_path, kind)
    *batches, flags = from_standard_input(path.read_bytes())
    assert flags == [True, False]
    expected = list(open_feed(path).batches())
    assert [b[:2] for b in batches] == [[b.first, b.values.tobytes().hex()] for b in expected]
    assert [b[2] for b in batches] == [
        None if b.times is None else b.times.tolist() for b in expected
    ]


@pytest.mark.parametrize("kind", ["csv", "parquet"])
def test_standard_input_from_a_file_can_be_gone_back_to(tmp_path: Path, kind: str) -> None:
    """A file put on standard input goes on behind a position like a file given by name."""
    path = make(tmp_path, kind)
    descriptor = os.open(path, os.O_RDONLY)
    try:
        *whole, flags = from_standard_input(descriptor)
        assert flags == [False, True]
        *rest, _ = from_standard_input(descriptor, whole[1][3])  # type: ignore[arg-type]
    finally:
        os.close(descriptor)
    assert rest == whole[2:]


def test_a_pipe_that_is_opened_again_goes_on_counting(tmp_path: Path) -> None:
    """What came through a pipe is gone; the numbers of the samples go on."""
    path = tmp_path / "feed.csv"
    path.write_text("a\n1\n2\n3\n")
    *batches, _ = from_standard_input(path.read_bytes())
    (again, _) = from_standard_input(b"a\n4\n", batches[-1][3])  # type: ignore[arg-type]
    assert again[0] == 3
    assert again[1] == np.array([4.0]).tobytes().hex()


@pytest.mark.parametrize(
    ("kind", "rows"), [("csv", 30), ("jsonl", 30), ("jsonl", 1), ("arrows", 30)]
)
def test_a_pipe_gives_what_has_come_without_waiting_for_more(kind: str, rows: int) -> None:
    """A producer that pauses gets its samples through before it goes on."""
    table = table_of(rows)
    data = {"csv": csv_bytes, "jsonl": json_bytes, "arrows": stream_bytes}[kind](table)
    program = PROGRAM.replace("wait=None", "wait=0.01").replace("]))", "]), flush=True)")
    with subprocess.Popen(
        [sys.executable, "-c", program, "null"], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        process.stdin.write(data)
        process.stdin.flush()
        # the pipe is still open while this line is read
        batch = json.loads(process.stdout.readline())
        process.stdin.close()
        rest = [json.loads(line) for line in process.stdout]
    assert batch[0] == 0
    assert len(batch[2]) == rows
    assert len(rest) == 1


def test_a_format_that_needs_a_file_is_refused_on_a_pipe(tmp_path: Path) -> None:
    """Parquet through a pipe is an error with a way out."""
    with pytest.raises(subprocess.CalledProcessError) as caught:
        from_standard_input(make(tmp_path, "parquet").read_bytes())
    assert b"give the file by name" in caught.value.stderr


def test_what_is_no_file_and_options_that_make_no_sense_are_refused(tmp_path: Path) -> None:
    """A named pipe, an unknown format, a wait of no time: each with the way out."""
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(FeedError, match=r"not a file; send it to standard input"):
        open_feed(tmp_path / "pipe")
    with pytest.raises(FeedError, match="format 'xml' is none of csv, json"):
        FeedOptions(format="xml")
    with pytest.raises(FeedError, match="wait 0: a number of seconds above 0"):
        FeedOptions(wait=0)


def test_truncated_gzip_is_named(tmp_path: Path) -> None:
    """A packed file that ends too early gives its whole lines, then an error."""
    path = make(tmp_path, "csv.gz")
    path.write_bytes(path.read_bytes()[:-9000])
    batches = open_feed(path).batches()
    assert len(next(batches)) == BATCH_ROWS
    with pytest.raises(FeedError, match="damaged gzip data"):
        list(batches)
