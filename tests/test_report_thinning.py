"""Thinning for pictures: no peak is lost, whatever the lengths and wherever batches are cut."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from streambasis.report.thinning import NO_TIME, Envelope


def columns_of(samples: np.ndarray, first: int, count: int, columns: int) -> list[np.ndarray]:
    """Return the positions in each column, by whole-number arithmetic of Python's own."""
    wide = max(1, min(columns, count))
    home = np.array([(int(s) - first) * wide // count for s in samples])
    return [np.flatnonzero(home == c) for c in range(wide)]


@given(st.data())
def test_every_column_holds_the_range_of_its_samples(data: st.DataObject) -> None:
    """Least and largest value of a column are those of its samples, with gaps and any cuts."""
    count = data.draw(st.integers(1, 300))
    columns = data.draw(st.integers(1, 64))
    first = data.draw(st.integers(0, 10**12))
    value = st.floats(allow_nan=True, allow_infinity=False, width=32)
    values = np.array(data.draw(st.lists(value, min_size=count, max_size=count)))
    cuts = data.draw(st.lists(st.integers(0, count), max_size=4))
    samples = first + np.arange(count)
    times = samples * 7 - 3
    envelope = Envelope(first, count, columns, ["a"])
    for piece in np.split(np.arange(count), sorted(cuts)):
        envelope.take(samples[piece], times[piece], {"a": values[piece]})
    for column, inside in enumerate(columns_of(samples, first, count, columns)):
        there = values[inside][~np.isnan(values[inside])]
        low, high = envelope.low["a"][column], envelope.high["a"][column]
        if there.size:
            assert (there.min(), there.max()) == (low, high)
        else:
            assert np.isnan(low)
            assert np.isnan(high)
        assert (times[inside[0]], times[inside[-1]]) == (
            envelope.begin[column],
            envelope.end[column],
        )
        assert inside.mean() + first == envelope.samples[column] or columns < count


def test_one_sample_among_millions_is_seen() -> None:
    """A peak of a single sample among five million stands in its column, at full height."""
    count, peak = 5_000_000, 3_141_592
    envelope = Envelope(0, count, 1200, ["spe"])
    for start in range(0, count, 1 << 18):
        samples = np.arange(start, min(start + (1 << 18), count))
        envelope.take(samples, None, {"spe": np.where(samples == peak, 50.0, 1.0)})
    assert np.flatnonzero(envelope.high["spe"] == 50.0).tolist() == [peak * 1200 // count]
    assert set(envelope.low["spe"]) == {1.0}
    assert set(envelope.begin) == {NO_TIME}


def test_a_column_without_samples_has_no_value() -> None:
    """Where a segment is missing, columns are empty instead of bridged."""
    envelope = Envelope(0, 100, 10, ["spe"])
    envelope.take(np.arange(40), None, {"spe": np.ones(40)})
    envelope.take(np.arange(60, 100), None, {"spe": np.ones(40)})
    assert np.flatnonzero(np.isnan(envelope.low["spe"])).tolist() == [4, 5]
