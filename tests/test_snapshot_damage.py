"""No bad file gets in: damage, forgery and the future are refused, by name."""

from __future__ import annotations

import io
import json
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet
import pytest
from mutations import digest_of
from states import orthonormal

import streambasis
from streambasis.errors import SnapshotError
from streambasis.seal import BLOCK, Digest, read_seal
from streambasis.snapshot import EXACT_CHECK, load, save, state_from_bytes, to_bytes
from streambasis.state import State

TESTS = Path(__file__).parent
MUTANTS = 500
ZEROS = "0" * 64


def small() -> bytes:
    """Return the snapshot of a small basis."""
    basis = streambasis.StreamBasis(["a", "b", "c"])
    basis.push_many([[1.0, 2.0, 3.0], [0.5, 0.0, 1.0]])
    return to_bytes(basis)


def refusal(data: bytes | bytearray) -> str:
    """Return the message with which bytes are refused."""
    with pytest.raises(SnapshotError) as caught:
        state_from_bytes(data)
    return str(caught.value)


def sealed(
    columns: dict[str, Any],
    outline: Any,
    *,
    seal: str = "streambasis-snapshot 1 sha256:",
    **how: Any,
) -> bytes:
    """Write a snapshot by the description of the format alone, with whatever is in it."""
    text = outline if isinstance(outline, str) else json.dumps(outline)
    metadata = {"snapshot": seal + ZEROS, "state": text, **how.pop("more", {})}
    schema = pa.schema(
        [pa.field(name, column.type, nullable=False) for name, column in columns.items()], metadata
    )
    batches = how.pop("batches", 1)
    file = io.BytesIO()
    with pa.ipc.new_file(file, schema, options=pa.ipc.IpcWriteOptions(**how)) as writer:
        for _ in range(batches):
            writer.write_batch(pa.record_batch(list(columns.values()), schema=schema))
    data = bytearray(file.getvalue())
    digest = digest_of(data)
    mark = (seal + ZEROS).encode()
    first = data.index(mark) + len(seal)
    second = data.index(mark, first) + len(seal)
    data[first : first + 64] = data[second : second + 64] = digest
    return bytes(data)


def rows(array: Any) -> Any:
    """Return an array as a column of one row."""
    column = pa.array(np.asarray(array).reshape(-1))
    for length in reversed(np.shape(array)):
        kind = pa.list_(pa.field("item", column.type, nullable=False), length)
        column = pa.FixedSizeListArray.from_arrays(column, type=kind)
    return column


def outline(shape: Any = (3,), **changes: Any) -> dict[str, Any]:
    """Return the metadata of a state with one array."""
    arrays = {"x": {"column": "x", "dtype": "float64", "shape": shape}}
    return {
        "written_by": "a test",
        "kind": "Kind",
        "facts": {},
        "arrays": arrays,
        "parts": {},
    } | changes


GOOD = {"x": rows([1.0, 2.0, 3.0])}


def test_the_description_of_the_format_suffices_to_write_one() -> None:
    """What the tests write by the description alone is read: so refusals below are for cause."""
    assert np.array_equal(state_from_bytes(sealed(GOOD, outline())).arrays["x"], [1.0, 2.0, 3.0])


@pytest.mark.parametrize("blocks", [0.5, 1, 2, 2.5])
def test_the_digest_is_as_described_at_any_length(tmp_path: Path, blocks: float) -> None:
    """The digest of long files, hashed in blocks, is that of the description; each block counts."""
    path = tmp_path / "state.arrow"
    values = np.zeros(int(blocks * BLOCK / 8))
    save(State("Kind", {}, {"values": values}), path)
    data = bytearray(path.read_bytes())
    seal = read_seal(memoryview(data))
    for position in (seal.first, seal.second):
        data[position : position + 64] = ZEROS.encode()
    assert digest_of(data) == seal.digest
    for position in range(5000, len(data) - 5000, BLOCK // 2):
        changed = bytearray(path.read_bytes())
        changed[position] = 1
        assert "digest" in refusal(changed)


def test_a_file_of_whole_blocks_has_no_empty_one() -> None:
    """Where the last block is full, nothing follows it."""
    data = bytes(2 * BLOCK)
    for size in (1, BLOCK - 1, BLOCK, BLOCK + 1, 2 * BLOCK):
        with Digest() as digest:
            for start in range(0, size, 999_999):
                digest.update(memoryview(data)[start : min(start + 999_999, size)])
            assert digest.text() == digest_of(data[:size]), size


def test_a_snapshot_cut_at_any_length_is_refused() -> None:
    """Truncation is found at every length."""
    data = small()
    for length in range(len(data)):
        refusal(data[:length])


def test_any_changed_byte_is_found() -> None:
    """At every position one flipped bit and one inverted byte are found, padding included."""
    data = bytearray(small())
    for position, value in enumerate(data):
        for change in (1 << position % 8, 0xFF):
            data[position] = value ^ change
            refusal(data)
        data[position] = value
    assert state_from_bytes(data).kind == "StreamBasis"


def test_bytes_after_the_end_are_found() -> None:
    """Nothing may follow the footer."""
    for more in (b"\0", b"\n", b"ARROW1", small()):
        refusal(small() + more)


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (b"", "empty"),
        (b"\0" * 5000, "not an Arrow file"),
        (b"kind,rank\nStreamBasis,3\n" * 100, "not an Arrow file"),
        (b"ARROW1\0\0", "cut short"),
        (b"ARROW1\0\0" * 100, "cut short"),
        (b"ARROW1\0\0" + b"\xff" * 4000 + b"ARROW1", "claims"),
    ],
    ids=["empty", "zeros", "text", "magic", "magic repeated", "lengths"],
)
def test_what_is_no_arrow_file_is_refused(data: bytes, message: str) -> None:
    """Other content is told from a damaged snapshot."""
    assert message in refusal(data)


def test_arrow_and_parquet_files_of_others_are_refused(tmp_path: Path) -> None:
    """Files that are fine, but no snapshots, are called so."""
    table = pa.table({"x": [1.0, 2.0]})
    with pa.ipc.new_file(tmp_path / "other.arrow", table.schema) as writer:
        writer.write_table(table)
    with pa.ipc.new_stream(tmp_path / "other.arrows", table.schema) as writer:
        writer.write_table(table)
    pyarrow.parquet.write_table(table, tmp_path / "other.parquet")
    messages = {"arrow": "not a snapshot", "arrows": "not an Arrow", "parquet": "not an Arrow"}
    for suffix, message in messages.items():
        path = tmp_path / f"other.{suffix}"
        with pytest.raises(SnapshotError) as caught:
            load(path)
        assert str(path) in str(caught.value)
        assert message in str(caught.value)


@pytest.mark.parametrize("rest", ["sha256:", "sha512:"])
def test_a_version_from_the_future_is_refused(rest: str) -> None:
    """A later version is called by its number, whatever its digest looks like."""
    message = refusal(sealed(GOOD, outline(), seal=f"streambasis-snapshot 2 {rest}"))
    assert "version 2" in message
    assert "update streambasis" in message


def nested(depth: int) -> dict[str, Any]:
    """Return the metadata of a state with parts inside of parts."""
    inner = {key: value for key, value in outline().items() if key != "written_by"}
    for _ in range(depth):
        inner = {"kind": "Kind", "facts": {}, "arrays": {}, "parts": {"p": inner}}
    return {"written_by": "a test", **inner}


BAD_OUTLINES: dict[str, Any] = {
    "no JSON": "{",
    "no object": "[]",
    "too deep": '{"written_by":"","a":' + "[" * 100_000 + "]" * 100_000 + "}",
    "facts too deep": outline(facts={"a": json.loads("[" * 900 + "]" * 900)}),
    "parts too deep": nested(80),
    "no writer": {k: v for k, v in outline().items() if k != "written_by"},
    "no kind": {k: v for k, v in outline().items() if k != "kind"},
    "more": outline(more=1),
    "kind no text": outline(kind=3),
    "facts no object": outline(facts=[]),
    "arrays no object": outline(arrays=[]),
    "parts no object": outline(parts=[]),
    "part no outline": outline(parts={"core": 1}),
    "array no claim": outline(arrays={"x": 3}),
    "unknown dtype": outline(arrays={"x": {"column": "x", "dtype": "object", "shape": [3]}}),
    "another dtype": outline(arrays={"x": {"column": "x", "dtype": "int64", "shape": [3]}}),
    "another column": outline(arrays={"x": {"column": "y", "dtype": "float64", "shape": [3]}}),
    "column no text": outline(arrays={"x": {"column": [], "dtype": "float64", "shape": [3]}}),
    "no array": outline(arrays={}),
    "one column twice": outline(
        arrays={n: {"column": "x", "dtype": "float64", "shape": [3]} for n in "xy"}
    ),
    "bad number": outline(facts={"a": {"$float": "1e999"}}),
    "channels without a column": outline(facts={"channels": ["a"]}),
}


@pytest.mark.parametrize("bad", BAD_OUTLINES.values(), ids=BAD_OUTLINES.keys())
def test_metadata_that_describes_no_state_is_refused(bad: Any) -> None:
    """With a right digest, metadata of another form or that disagrees with the columns is found."""
    refusal(sealed(GOOD, bad))


@pytest.mark.parametrize(
    "shape",
    [
        [2],
        [4],
        [3, 1],
        [1, 3],
        [],
        [1, 1, 3],
        [-3],
        [3.0],
        [True],
        "3",
        [0],
        [2**31 - 1],
        [2**31 - 1, 2**31 - 1],
        [2**62],
        [10**30],
    ],
    ids=str,
)
def test_shapes_that_disagree_or_are_absurd_are_refused(shape: Any) -> None:
    """A claim is compared with the column and the size of the file before anything is allocated."""
    message = refusal(sealed(GOOD, outline(shape)))
    assert "'x'" in message or "1 columns" in message


def test_columns_of_other_types_are_refused_unread() -> None:
    """Variable width, other rows, several batches and compression are no part of the format."""
    empty = outline(arrays={})
    text = pa.array(["a"])
    refusal(sealed({"x": text}, empty))
    refusal(sealed({"x": text}, outline()))
    refusal(sealed({"x": pa.array([[1.0, 2.0, 3.0]])}, outline()))
    refusal(sealed({"x": pa.array([[1.0, 2.0, 3.0]] * 2, GOOD["x"].type)}, outline()))
    assert "record batches" in refusal(sealed(GOOD, outline(), batches=2))
    assert "record batches" in refusal(sealed(GOOD, outline(), batches=0))
    refusal(sealed(GOOD, outline(), more={"further": "key"}))
    for codec in ("lz4", "zstd"):
        packed = {"x": rows(np.zeros(3000))}
        # the long fact makes the file as large as the claim
        claim = outline([3000], facts={"text": "x" * 30_000})
        assert "lie in the file" in refusal(sealed(packed, claim, compression=codec))


def test_truth_values_are_nought_or_one() -> None:
    """A byte of 2 is no truth value."""
    claim = outline(arrays={"x": {"column": "x", "dtype": "bool", "shape": [3]}})
    assert (
        state_from_bytes(sealed({"x": rows(np.uint8([0, 1, 1]))}, claim)).arrays["x"].dtype == bool
    )
    assert "truth values" in refusal(sealed({"x": rows(np.uint8([0, 1, 2]))}, claim))


def test_channel_names_that_disagree_are_refused() -> None:
    """The names in the column and in the metadata are the same."""
    names = pa.array([b"a", b"b"], pa.binary(1))
    kind = pa.list_(pa.field("item", names.type, nullable=False), 2)
    column = {"channels": pa.FixedSizeListArray.from_arrays(names, type=kind)}
    fine = outline(arrays={}, facts={"channels": ["a", "b"]})
    assert state_from_bytes(sealed(column, fine)).facts["channels"] == ["a", "b"]
    wrong = outline(arrays={}, facts={"channels": ["a", "c"]})
    assert "names" in refusal(sealed(column, wrong))


def spoil_nan(vectors: Any) -> None:
    """One value is missing."""
    vectors[-1, -1] = np.nan


def spoil_infinite(vectors: Any) -> None:
    """One value is infinite."""
    vectors[0, 0] = np.inf


def spoil_length(vectors: Any) -> None:
    """One direction is longer by a hundredth."""
    vectors[1] *= 1.01


def spoil_angle(vectors: Any) -> None:
    """Two directions are not orthogonal."""
    vectors[2] = (vectors[2] + 0.01 * vectors[0]) / np.hypot(1, 0.01)


def spoil_repeat(vectors: Any) -> None:
    """A direction comes twice."""
    vectors[2] = vectors[1]


@pytest.mark.parametrize("rows_and_channels", [(3, 20), (600, 640)], ids=["in full", "by probes"])
@pytest.mark.parametrize("dtype", ["float32", "float64", "complex64", "complex128"])
def test_bad_directions_are_refused(rows_and_channels: tuple[int, int], dtype: str) -> None:
    """Directions that are not finite or not orthonormal are found, wherever they lie."""
    count, channels = rows_and_channels
    assert (count * count * channels > EXACT_CHECK) == (count == 600)
    good = orthonormal(count, channels, dtype)
    assert state_from_bytes(to_bytes(State("Kind", {}, {"vectors": good}))).kind == "Kind"
    spoilers: dict[Callable[[Any], None], str] = {
        spoil_nan: "not finite",
        spoil_infinite: "not finite",
        spoil_length: "not orthonormal",
        spoil_angle: "not orthonormal",
        spoil_repeat: "not orthonormal",
    }
    for spoil, message in spoilers.items():
        bad = good.copy()
        spoil(bad)
        data = to_bytes(State("Kind", {}, {}, {"part": State("Part", {}, {"vectors": bad})}))
        assert message in refusal(data), spoil.__doc__
        assert state_from_bytes(data, verify=False).kind == "Kind"


def test_more_directions_than_channels_are_refused() -> None:
    """Directions have a shape that directions can have."""
    for vectors in (np.ones((3, 2)), np.ones(3), np.ones((1, 3), np.int64)):
        assert "directions" in refusal(to_bytes(State("Kind", {}, {"vectors": vectors})))


def test_mutated_snapshots_neither_crash_nor_hang_nor_load(tmp_path: Path) -> None:
    """Hundreds of snapshots changed at random, in processes with little memory: all are refused.

    Every second one is sealed anew after the change, as a forger would: then it is refused, or
    loaded and pushed to, and the process goes on.
    """
    share = MUTANTS // 2
    runs = [
        subprocess.Popen(
            [sys.executable, str(TESTS / "mutations.py"), str(tmp_path), str(seed), str(share)],
            cwd=TESTS.parent,
            env={**os.environ, "PYTHONPATH": str(TESTS.parent)},
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for seed in (1, 2)
    ]
    for run in runs:
        shown, errors = run.communicate(timeout=100)
        assert run.returncode == 0, errors
        ends = json.loads(shown)["ends"]
        refused = sum(n for end, n in ends.items() if not end.startswith("forged"))
        assert refused == share
        assert ends["forged, used"] > 0
        assert ends["forged, refused"] > 0
