"""The boundary: what is let in, what is refused, and that nothing is copied without need."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import numpy as np
import pyarrow as pa
import pytest

from streambasis.errors import SampleError, SampleTypeError, SettingError
from streambasis.samples import Channels, checked_dtype, many_samples, one_sample

DOUBLE = np.dtype("float64")


@pytest.mark.parametrize(
    ("channels", "message"),
    [
        (0, "channels=0"),
        (-3, "channels=-3"),
        ("abc", "give a count or a sequence of names"),
        (2.5, "channels=2.5"),
        (True, "channels=True"),
        (["a", "b", "a"], "channel 'a' is named twice"),
        (["a", 3], "channel 3"),
        ([], "at least one channel"),
    ],
)
def test_channels_that_make_no_sense_are_refused(channels: Any, message: str) -> None:
    """A wrong count or list of names raises an error that says which."""
    with pytest.raises(SettingError) as caught:
        Channels(channels)
    assert message in str(caught.value)


def test_channels_compare_by_names() -> None:
    """Counted channels are numbered; named ones differ from them even under the same names."""
    assert Channels(np.int64(3)).names == ("0", "1", "2")
    assert Channels(["0", "1"]) != Channels(2)
    assert Channels(iter("ab")) == Channels(["a", "b"])
    assert len({Channels(2), Channels(2), Channels(3)}) == 2
    assert Channels(2) != "01"


@pytest.mark.parametrize("dtype", ["float16", "longdouble", "int64", "object", "U3", "no", None])
def test_other_dtypes_are_refused(dtype: Any) -> None:
    """Only the four that the kernels know are taken; None is no silent default of NumPy's."""
    if dtype is None:
        assert checked_dtype(dtype) == DOUBLE
        return
    with pytest.raises(SettingError, match="one of float32"):
        checked_dtype(dtype)


def test_a_fitting_array_is_used_as_it_is() -> None:
    """No copy of a C-contiguous array of the right dtype, one of anything else."""
    batch = np.ones((3, 2))
    channels = Channels(2)
    assert np.shares_memory(many_samples(batch, channels, DOUBLE), batch)
    assert np.shares_memory(one_sample(batch[1], channels, DOUBLE), batch)
    for other in (np.asfortranarray(batch), batch.astype("f4"), batch.tolist(), batch[::-1]):
        out = many_samples(other, channels, DOUBLE)
        assert out.flags.c_contiguous
        assert out.dtype == DOUBLE
        np.testing.assert_array_equal(out, np.asarray(other))


@pytest.mark.parametrize(
    ("values", "error", "message"),
    [
        ([1.0], SampleError, "sample 7: shape (1,), expected (2,)"),
        ([[1.0, 2.0]], SampleError, "sample 7: shape (1, 2)"),
        ([1.0, np.nan], SampleError, "sample 7, channel 'b': value nan"),
        ([-np.inf, 1.0], SampleError, "sample 7, channel 'a': value -inf"),
        ([1.0, 1j], SampleTypeError, "complex"),
        (["1", "2"], SampleTypeError, "sample 7"),
        ([None, 1.0], SampleTypeError, "sample 7"),
        ([1.0, "two"], SampleTypeError, "'two' at position 1 is none"),
        ({"a": 1.0}, SampleTypeError, "{'a': 1.0} is none"),
        ([1.0, [2.0]], SampleError, "sample 7"),
        (np.array([1, 2], "M8[s]"), SampleTypeError, "datetime64"),
        (3.0, SampleError, "sample 7: shape ()"),
    ],
)
def test_wrong_samples_are_named(values: Any, error: type[Exception], message: str) -> None:
    """The message names sample, channel and value."""
    with pytest.raises(error) as caught:
        one_sample(values, Channels(["a", "b"]), DOUBLE, number=7)
    assert message in str(caught.value)


def test_wrong_batches_are_named_by_row() -> None:
    """The first value that is not finite is named, counted from the first sample."""
    batch = np.zeros((5, 3))
    batch[3, 1] = np.inf
    batch[4, 0] = np.nan
    with pytest.raises(SampleError, match=r"sample 103, channel '1': value inf"):
        many_samples(batch, Channels(3), DOUBLE, first=100)
    for wrong in (np.zeros(3), np.zeros((2, 4)), np.zeros((1, 1, 3)), [[1, 2, 3], [1, 2]]):
        with pytest.raises(SampleError, match="batch"):
            many_samples(wrong, Channels(3), DOUBLE)


def test_large_finite_values_are_no_infinities() -> None:
    """Squares that overflow do not make a finite value look infinite; nor does cancellation."""
    batch = np.full((2, 2), 1e308)
    np.testing.assert_array_equal(many_samples(batch, Channels(2), DOUBLE), batch)
    with pytest.raises(SampleError, match=r"sample 0, channel '1'"):
        many_samples([[1e308, np.inf], [-np.inf, 1.0]], Channels(2), DOUBLE)


def test_a_value_beyond_single_precision_is_refused() -> None:
    """A double that single precision cannot hold is not taken as infinity."""
    with pytest.raises(SampleError, match=r"channel '0': value inf"):
        one_sample([1e39, 0.0], Channels(2), np.dtype("float32"))


def test_missing_values_where_they_are_asked_for() -> None:
    """NaN and nulls pass as missing channels when asked for; infinity never does."""
    channels = Channels(["a", "b"])
    table = pa.table({"a": [1.0, None], "b": [2, 3]})
    out = many_samples(table, channels, DOUBLE, missing=True)
    np.testing.assert_array_equal(out, [[1, 2], [np.nan, 3]])
    assert np.isnan(one_sample([np.nan, 1], channels, DOUBLE, missing=True)[0])
    never = pa.table({"a": pa.nulls(2), "b": [2, 3]})
    out = many_samples(never, channels, DOUBLE, missing=True)
    np.testing.assert_array_equal(out, [[np.nan, 2], [np.nan, 3]])
    with pytest.raises(SampleTypeError, match="column 'a': values of type null"):
        many_samples(never, channels, DOUBLE)
    with pytest.raises(SampleError, match="not finite"):
        one_sample([np.nan, np.inf], channels, DOUBLE, missing=True)


def test_arrow_columns_of_every_number_type() -> None:
    """Integers, decimals, booleans and half to double floats become the dtype of the basis."""
    kinds = (pa.int8(), pa.uint64(), pa.float32())
    arrays = [pa.array([True, False]), *(pa.array([1, 0]).cast(kind) for kind in kinds)]
    arrays += [pa.array([Decimal("1.00"), Decimal("0.00")])]
    table = pa.Table.from_arrays(arrays, names=list("abcde"))
    out = many_samples(table, Channels(5), np.dtype("complex64"))
    np.testing.assert_array_equal(out, [[1] * 5, [0] * 5])
    with pytest.raises(SampleError, match="5 columns for 4 channels"):
        many_samples(table, Channels(4), DOUBLE)


def test_a_batch_that_comes_as_one_arrow_array_is_taken() -> None:
    """An object that hands over a single array, and no stream, is a table of its fields."""

    class Handed:
        """Speaks the array half of the PyCapsule protocol and nothing else."""

        def __init__(self, batch: pa.RecordBatch) -> None:
            self._batch = batch

        def __arrow_c_array__(self, requested_schema: object = None) -> object:
            return self._batch.__arrow_c_array__(requested_schema)

    batch = pa.RecordBatch.from_pydict({"b": [2.0, 4.0], "a": [1, 3]})
    taken = many_samples(Handed(batch), Channels(["a", "b"]), DOUBLE)
    assert taken.tolist() == [[1.0, 2.0], [3.0, 4.0]]
    with pytest.raises(SampleError, match="column 'c' is missing"):
        many_samples(Handed(batch), Channels(["a", "c"]), DOUBLE)
