"""Snapshots come back bit for bit, and others can read them."""

from __future__ import annotations

import json
import mmap
import re
import stat
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa
import pytest
from states import DTYPES, orthonormal, same, varied

import streambasis
from streambasis.errors import SnapshotError, SnapshotMissingError
from streambasis.snapshot import (
    READ_WHOLE,
    from_bytes,
    read_state,
    save,
    state_from_bytes,
    to_bytes,
)
from streambasis.state import State


def test_a_state_comes_back_bit_for_bit(tmp_path: Path) -> None:
    """Every dtype, shape, fact and part survives, through bytes and through a file."""
    state = varied()
    same(state, state_from_bytes(to_bytes(state)))
    save(state, tmp_path / "state.arrow")
    same(state, read_state(tmp_path / "state.arrow"))
    assert (tmp_path / "state.arrow").read_bytes() == to_bytes(state)


def test_not_a_number_comes_back() -> None:
    """NaN, which JSON does not know, survives as a fact and inside lists."""
    state = State("Facts", {"x": float("nan"), "y": [float("nan")]})
    facts = state_from_bytes(to_bytes(state)).facts
    assert np.isnan(facts["x"])
    assert np.isnan(facts["y"][0])


@pytest.mark.parametrize("value", [(1, 2), {1: 2}, np.arange(3), b"x", {1}, object()], ids=str)
def test_a_fact_that_would_come_back_as_another_is_refused(value: Any) -> None:
    """What JSON cannot hold exactly is refused when saving, and the message says where it is."""
    with pytest.raises(TypeError, match=r"fact Kind\.a\[0\]"):
        to_bytes(State("Kind", {"a": [value]}))


def test_numbers_of_numpy_come_back_as_plain_ones() -> None:
    """A setting given as a NumPy number is the same number afterwards."""
    state = State("Kind", {"a": [np.int64(2**62), np.float32(0.1), np.bool_(True)]})
    facts = state_from_bytes(to_bytes(state)).facts
    assert facts["a"] == [2**62, float(np.float32(0.1)), True]


@pytest.mark.parametrize(
    "array", [np.zeros((2, 2, 2)), np.array(1.0), np.zeros(3, "U3"), np.zeros(3, np.float16)]
)
def test_an_array_outside_the_format_is_refused(array: Any) -> None:
    """Arrays of other dimensions and dtypes are refused when saving, by name."""
    with pytest.raises(TypeError, match="array 'wrong' of Kind"):
        to_bytes(State("Kind", {}, {"wrong": array}))


def test_names_that_would_make_bad_columns_are_refused() -> None:
    """Arrays and parts go by plain names."""
    with pytest.raises(ValueError, match="'a b'"):
        to_bytes(State("Kind", {}, {"a b": np.zeros(1)}))
    with pytest.raises(ValueError, match=r"'x\.y'"):
        to_bytes(State("Kind", {}, {}, {"x.y": State("Part")}))


def test_an_object_without_a_state_is_refused() -> None:
    """Saving anything else says what can be saved."""
    with pytest.raises(TypeError, match=r"dict has no state to save: StreamBasis"):
        to_bytes({})  # type: ignore[arg-type]


def test_the_arrays_of_parts_have_columns_of_their_own() -> None:
    """The core's arrays go by their plain names, those of other parts by the part's name first."""
    names = pa.ipc.open_file(to_bytes(varied())).schema.names
    assert {"channels", "vectors", "known_vectors", "known_x", "matrix_complex64"} <= set(names)
    assert "nothing" not in names


def test_two_arrays_never_share_a_column() -> None:
    """A clash of names is resolved, and the metadata says how."""
    part = State("Part", {}, {"b_c": np.arange(3)}, {"b": State("Part", {}, {"c": np.arange(4)})})
    state = State("Whole", {"channels": ["x"]}, {"channels": np.arange(5)}, {"core": part})
    same(state, state_from_bytes(to_bytes(state)))


def test_the_file_is_little_larger_than_its_arrays() -> None:
    """A long window lies beside a few directions without padding."""
    arrays = {"times": np.arange(100_000), "vectors": orthonormal(16, 300)}
    size = len(to_bytes(State("Kind", {}, arrays)))
    most = sum(array.nbytes for array in arrays.values()) + 4096
    assert size <= most


def test_columns_have_fixed_width_and_no_gaps() -> None:
    """Only types of fixed width are written, without nulls and uncompressed."""

    def check(kind: Any) -> None:
        if pa.types.is_fixed_size_list(kind):
            assert not kind.value_field.nullable
            check(kind.value_type)
        else:
            assert pa.types.is_primitive(kind) or pa.types.is_fixed_size_binary(kind)

    data = to_bytes(varied())
    schema = pa.ipc.open_file(data).schema
    for field in schema:
        assert not field.nullable
        check(field.type)
    assert varied().arrays["matrix_float64"].tobytes() in data


def test_the_metadata_is_json_that_others_read() -> None:
    """Format, version, kind, facts and shapes stand in the schema metadata as text and JSON."""
    metadata = pa.ipc.open_file(to_bytes(varied())).schema.metadata
    assert metadata[b"snapshot"].startswith(b"streambasis-snapshot 1 sha256:")
    outline = json.loads(metadata[b"state"])
    assert outline["written_by"] == f"streambasis {streambasis.__version__}"
    assert outline["kind"] == "Varied"
    assert outline["facts"]["infinite"] == {"$float": "inf"}
    assert outline["parts"]["known"]["arrays"]["vectors"] == {
        "column": "known_vectors",
        "dtype": "complex64",
        "shape": [3, 5],
    }


def test_a_second_arrow_implementation_reads_the_same(tmp_path: Path) -> None:
    """polars, whose Arrow reader is its own, sees equal names, shapes and values."""
    state = varied()
    save(state, tmp_path / "state.arrow")
    frame = pl.read_ipc(tmp_path / "state.arrow")
    assert frame.columns == pa.ipc.open_file(tmp_path / "state.arrow").schema.names
    assert frame.height == 1
    for dtype in DTYPES:
        for shape in ("matrix", "vector"):
            expected = state.arrays[f"{shape}_{dtype}"]
            if expected.dtype.kind == "c":
                expected = expected.view(expected.real.dtype)
            actual = frame[f"{shape}_{dtype}"].to_numpy()[0]
            assert actual.shape == expected.shape
            assert np.array_equal(actual, expected)
    names = [name.rstrip(b"\0").decode() for name in frame["channels"][0].to_list()]
    assert names == state.facts["channels"]
    directions = frame.select("vectors").explode("vectors")["vectors"].to_numpy()
    assert np.array_equal(directions, state.parts["core"].arrays["vectors"])


def test_the_example_in_the_format_description_runs(tmp_path: Path) -> None:
    """The code in DEVELOPERS.md that reads a snapshot without streambasis does so."""
    text = (Path(__file__).parent.parent / "DEVELOPERS.md").read_text()
    (code,) = re.findall(r"```python\n(import json\n.*?)```", text, re.DOTALL)
    basis = streambasis.StreamBasis(["inlet", "Auslaß"])
    basis.push([3.0, 4.0])
    save(basis, tmp_path / "state.arrow")
    found: dict[str, Any] = {"path": str(tmp_path / "state.arrow")}
    exec(code, found)
    assert found["state"]["kind"] == "StreamBasis"
    assert found["directions"] == [{"inlet": 0.6, "Auslaß": 0.8}]


def test_sql_reads_the_same(tmp_path: Path) -> None:
    """duckdb, through Arrow's C interface, sees directions as rows of numbers."""
    state = State(
        "Kind",
        {"channels": ["a", "bb", "c"]},
        {
            "vectors": orthonormal(2, 3),
            "energies": np.array([2.5, 0.5]),
            "pivots": np.array([3, 9]),
        },
    )
    save(state, tmp_path / "state.arrow")
    table = pa.ipc.open_file(tmp_path / "state.arrow").read_all()
    shown = duckdb.from_arrow(table).query(
        "snapshot",
        "select unnest(vectors), unnest(energies), unnest(pivots) from snapshot",
    )
    rows = shown.fetchall()
    assert np.array_equal([row[0] for row in rows], state.arrays["vectors"])
    assert [row[1:] for row in rows] == [(2.5, 3), (0.5, 9)]
    names = duckdb.from_arrow(table).query("snapshot", "select unnest(channels) from snapshot")
    assert [row[0].rstrip(b"\0") for row in names.fetchall()] == [b"a", b"bb", b"c"]


def test_nobody_else_may_read_the_file_unless_told_otherwise(tmp_path: Path) -> None:
    """The owner alone has access by default; mode= says otherwise, whatever the umask."""
    path = tmp_path / "state.arrow"
    save(varied(), path)
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    save(varied(), path, mode=0o664)
    assert stat.S_IMODE(path.stat().st_mode) == 0o664


def test_a_missing_file_is_a_file_not_found_error(tmp_path: Path) -> None:
    """A missing snapshot is an OSError as well as one of ours, and names the file."""
    path = tmp_path / "none.arrow"
    with pytest.raises(SnapshotMissingError) as caught:
        streambasis.load(path)
    assert isinstance(caught.value, FileNotFoundError | SnapshotError)
    assert str(path) in str(caught.value)
    assert caught.value.filename == str(path)


@pytest.mark.parametrize("special", ["/dev/null", "."])
def test_what_is_no_file_is_refused(special: str) -> None:
    """Devices and folders are refused, not read."""
    with pytest.raises(SnapshotError, match="not a regular file"):
        streambasis.load(special)


def test_a_state_that_is_no_object_is_not_loaded_as_one() -> None:
    """load() says what the file holds where that is none of the objects."""
    with pytest.raises(SnapshotError, match="state of a 'Varied'"):
        from_bytes(to_bytes(varied()))


def test_large_files_are_mapped_and_changes_stay_private(tmp_path: Path) -> None:
    """A large array is a page of the file until it is written to, and the file never changes."""
    path = tmp_path / "state.arrow"
    values = np.arange(READ_WHOLE // 8, dtype=np.float64)
    save(State("Kind", {}, {"values": values}), path)
    before = path.read_bytes()
    taken = read_state(path).take("values")
    base = taken
    while isinstance(base, np.ndarray):
        base = base.base
    assert isinstance(base.obj if isinstance(base, memoryview) else base, mmap.mmap)
    taken[:] = -1
    assert path.read_bytes() == before
    assert np.array_equal(read_state(path).take("values"), values)


def test_a_state_that_was_not_read_from_a_file_is_copied_from() -> None:
    """take() shares no memory with a state that somebody else may hold."""
    state = State("Kind", {}, {"values": np.arange(3)})
    state.take("values")[:] = 7
    assert np.array_equal(state.arrays["values"], [0, 1, 2])
    data = to_bytes(state)
    state_from_bytes(data).take("values")[:] = 7
    assert np.array_equal(state_from_bytes(data).arrays["values"], [0, 1, 2])


def test_bytes_at_any_address_are_read() -> None:
    """A view that begins at an odd address is read like any other."""
    data = to_bytes(varied())
    for offset in range(1, 9):
        same(varied(), state_from_bytes(memoryview(b"x" * offset + data)[offset:]))
