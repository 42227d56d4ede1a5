"""Whatever comes from outside: refused or read, never a crash, a hang or memory without bound."""

from __future__ import annotations

import gzip
import io
import json
import struct
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from streambasis.errors import FeedError
from streambasis.feeds import FeedOptions, open_feed
from streambasis.feeds.objects import RowError
from streambasis.feeds.payloads import MOST_PAYLOAD, MOST_ROWS, PayloadReader, columns_in

ROUNDS = 400
FILE_ROUNDS = 100
MOST_MEMORY = 64 << 20
FIRST = b'{"time": 1, "seq": 1, "a": 1, "b": 2}'


def stream_of(table: pa.Table, **how: object) -> bytes:
    """Return a table as an Arrow IPC stream."""
    out = io.BytesIO()
    with pa.ipc.new_stream(out, table.schema, **how) as writer:
        writer.write_table(table)
    return out.getvalue()


def table_of(rows: int = 40) -> pa.Table:
    """Return a table of a time, a sequence number and two channels."""
    numbers = np.arange(rows)
    return pa.table(
        {
            "time": numbers * 1.5,
            "seq": numbers,
            "a": numbers / 3,
            "b": pa.array([None, 1] * (rows // 2)),
        }
    )


def mutated(rng: np.random.Generator, data: bytes) -> bytes:
    """Return bytes with bits flipped, parts cut out, doubled, zeroed or exchanged for noise."""
    changed = bytearray(data)
    for _ in range(rng.integers(1, 4)):
        if not changed:
            break
        at = int(rng.integers(len(changed)))
        length = int(rng.integers(1, 33))
        kind = rng.integers(6)
        if kind == 0:
            changed[at] ^= 1 << int(rng.integers(8))
        elif kind == 1:
            del changed[at : at + length]
        elif kind == 2:
            changed[at:at] = changed[at : at + length]
        elif kind == 3:
            changed[at : at + length] = bytes(len(changed[at : at + length]))
        elif kind == 4:
            changed[at : at + length] = rng.bytes(length)
        else:
            del changed[at:]
    return bytes(changed)


def reader_of_first() -> PayloadReader:
    """Return a reader of payloads like the first one."""
    return PayloadReader("feed", columns_in("feed", FIRST, None, None))


def read_payload(reader: PayloadReader, payload: bytes) -> bool:
    """Read a payload; return whether it held samples, which are sound then."""
    try:
        content = reader.read("topic", payload)
    except RowError:
        return False
    assert content.values.shape[1] == 2
    assert 0 < len(content.values) <= MOST_ROWS
    assert not np.isinf(content.values).any()
    assert content.times is not None
    assert len(content.times) == len(content.values)
    return True


SEEDS: dict[str, Callable[[], bytes]] = {
    "object": lambda: FIRST,
    "stream": lambda: stream_of(table_of()),
}


@pytest.mark.parametrize("seed", SEEDS)
def test_mutated_payloads_are_read_or_refused(seed: str) -> None:
    """Damage of every kind is a RowError or sound samples, within bounded memory."""
    rng = np.random.default_rng(5)
    reader = reader_of_first()
    data = SEEDS[seed]()
    assert read_payload(reader, data)
    before = pa.total_allocated_bytes()
    tracemalloc.start()
    outcomes = [read_payload(reader, mutated(rng, data)) for _ in range(ROUNDS)]
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert set(outcomes) == {True, False}
    assert peak < MOST_MEMORY
    assert pa.total_allocated_bytes() <= before
    assert pa.default_memory_pool().max_memory() < 1 << 30


@given(st.binary(max_size=300))
def test_random_bytes_are_no_payload(payload: bytes) -> None:
    """Bytes without any sense are refused; so they are behind the mark of an Arrow stream."""
    reader = reader_of_first()
    read_payload(reader, payload)
    assert not read_payload(reader, b"\xff\xff\xff\xff" + payload)


VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3), inner),
    max_leaves=8,
)


@given(st.dictionaries(st.sampled_from(["time", "seq", "a", "b", "c"]), VALUES))
def test_any_json_is_read_or_refused(found: dict[str, object]) -> None:
    """Values of any kind under the names of channels give finite samples or a reason."""
    read_payload(reader_of_first(), json.dumps(found).encode())


def variable_width() -> bytes:
    """Return a stream with a column of text beside the channels."""
    return stream_of(table_of().append_column("note", pa.array(["x"] * 40)))


def packed() -> bytes:
    """Return a small stream that would unpack to a gigabyte."""
    schema = table_of().schema
    zeros = pa.table(
        [pa.array(np.zeros(MOST_ROWS, field.type.to_pandas_dtype())) for field in schema],
        schema=schema,
    )
    return stream_of(zeros, options=pa.ipc.IpcWriteOptions(compression="zstd"))


def claims_rows() -> bytes:
    """Return a stream whose record batch claims more rows than anybody could hold."""
    data = stream_of(pa.table({"time": pa.nulls(99), "a": pa.nulls(99), "b": pa.nulls(99)}))
    return data.replace(struct.pack("<q", 99), struct.pack("<q", 2**62))


def dictionary() -> bytes:
    """Return a stream with a column of codes."""
    codes = pa.array(["x"] * 40).dictionary_encode()
    return stream_of(table_of().append_column("code", codes))


REFUSED = [
    (variable_width, "column 'note' is not of fixed width"),
    (packed, "a packed Arrow IPC stream"),
    (claims_rows, "more than 65536 samples in one payload"),
    (dictionary, "more than samples"),
    (lambda: stream_of(table_of(MOST_ROWS + 2)), "more than 65536 samples in one payload"),
    (lambda: stream_of(table_of(0)), "no samples in it"),
    (lambda: stream_of(table_of()) + b"x" * MOST_PAYLOAD, "larger than 4194304 bytes"),
    (lambda: stream_of(table_of().drop(["b"])), "no column 'b'"),
    (lambda: stream_of(table_of().rename_columns(["time", "a", "a", "b"])), "2 columns are named"),
]


@pytest.mark.parametrize(("payload", "reason"), REFUSED, ids=[r[1][:30] for r in REFUSED])
def test_streams_that_could_do_harm_are_refused_unread(
    payload: Callable[[], bytes], reason: str
) -> None:
    """Packed, of variable width, or claiming too much: refused with the reason."""
    reader = reader_of_first()
    with pytest.raises(RowError, match=reason):
        reader.read("topic", payload())


def csv_bytes() -> bytes:
    """Return 300 rows of CSV."""
    return b"time,a,b\n" + b"".join(
        b"2026-03-02T00:00:%02d,%d,1.5\n" % (i % 60, i) for i in range(300)
    )


def json_bytes() -> bytes:
    """Return 300 lines of JSON."""
    return b"".join(b'{"time": %d, "a": %d, "b": 1.5}\n' % (i, i) for i in range(300))


FILES: dict[str, Callable[[], bytes]] = {
    "csv": csv_bytes,
    "json": json_bytes,
    "csv.gz": lambda: gzip.compress(csv_bytes(), mtime=0),
}


@pytest.mark.parametrize("kind", FILES)
def test_mutated_files_are_read_or_refused(tmp_path: Path, kind: str) -> None:
    """Damage costs the lines it touches, or is a FeedError; every other line is read."""
    rng = np.random.default_rng(6)
    data = FILES[kind]()
    path = tmp_path / "feed"
    read = 0
    refused: list[str] = []
    for _ in range(FILE_ROUNDS):
        kind_of_damage = rng.choice(["none", "noise", "mutated"], p=[0.05, 0.1, 0.85])
        path.write_bytes(
            {"none": data, "noise": rng.bytes(2000), "mutated": mutated(rng, data)}[kind_of_damage]
        )
        try:
            with open_feed(path, channels=["a", "b"], options=FeedOptions(strict=False)) as feed:
                for batch in feed.batches():
                    read += len(batch)
                    assert not np.isinf(batch.values).any()
                    assert batch.position["sample"] == batch.first + len(batch)
        except FeedError as error:
            refused.append(str(error))
    assert read > 0
    assert refused
    assert all(reason.startswith(str(path)) for reason in refused)


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.text(alphabet='0123456789.,;-+eE"\r\t\x00ä naN', max_size=30), max_size=20))
def test_lines_of_any_characters_keep_the_count(tmp_path: Path, lines: list[str]) -> None:
    """Every line that is not blank is a sample or a malformed row, whatever stands in it."""
    path = tmp_path / "feed.csv"
    body = "\n".join(lines) + "\n"
    # enough good rows that nobody doubts what the columns hold
    path.write_bytes(b"a,b\n" + b"1,2\n" * 30 + body.encode())
    batches = list(
        open_feed(path, channels=["a", "b"], options=FeedOptions(strict=False)).batches()
    )
    samples = sum(len(batch) for batch in batches)
    malformed = sum(len(batch.malformed) for batch in batches)
    filled = [line for line in body.split("\n")[:-1] if line not in ("", "\r")]
    assert samples + malformed == 30 + len(filled)
