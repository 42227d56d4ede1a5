"""What a worker of Spark does with the rows of a feed, without Spark: order, state, refusals."""

from __future__ import annotations

import json
from collections.abc import Iterator
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from streambasis import NoveltyMonitor, from_bytes, to_bytes
from streambasis.errors import SampleError
from streambasis.fleet.spark_watching import (
    DECIDED,
    DUPLICATE,
    FEED,
    LATE,
    NO_KEY,
    NO_TIME,
    NOT_FINITE,
    STORED,
    Arrivals,
    Watching,
)
from tests.fleets import CONFIG, feed

SAMPLES = 400
MICROSECONDS = 1_772_000_000_000_000 + np.arange(SAMPLES) * 250_000


class Store:
    """Stands for the state store: what a task keeps is there for the next one."""

    def __init__(self) -> None:
        self.value: tuple[bytes] | None = None

    def getValueState(self, name: str, schema: str) -> Store:
        """Hand out the one state there is."""
        assert (name, schema) == (FEED, STORED)
        return self

    def get(self) -> tuple[bytes] | None:
        """Return what was kept last."""
        return self.value

    def update(self, value: tuple[bytes]) -> None:
        """Keep a value."""
        self.value = value


def frames(at: np.ndarray, values: np.ndarray, pieces: int = 1) -> Iterator[pd.DataFrame]:
    """Return rows as Spark hands them over: some frames, a sample as one array."""
    for rows in np.array_split(np.arange(len(at)), pieces):
        yield pd.DataFrame({"at": at[rows], "values": list(values[rows])})


def micro_batch(
    store: Store, at: np.ndarray, values: np.ndarray, *, key: str = "=a", seconds: bool = False
) -> pd.DataFrame:
    """Have a new task take one micro-batch of a key; return all that it puts out."""
    operator = Watching(to_bytes(NoveltyMonitor(**CONFIG)), seconds=seconds)
    operator.init(store)
    put_out = list(operator.handleInputRows((key,), frames(at, values, 3), None))
    operator.close()
    assert all(list(frame) == list(put_out[0]) for frame in put_out)
    return pd.concat([frame.astype(object) for frame in put_out], ignore_index=True)


def test_micro_batches_give_what_the_monitor_gives() -> None:
    """However a feed is cut and its rows are mixed within, decisions, events and state agree."""
    values = feed(3, SAMPLES)
    whole = NoveltyMonitor(**CONFIG)
    table = whole.push_many(values, at=MICROSECONDS.astype("datetime64[us]"))
    for seed in range(4):
        rng = np.random.default_rng(seed)
        cuts = [0, *np.sort(rng.choice(np.arange(1, SAMPLES), seed * 3, replace=False)), SAMPLES]
        store, put_out = Store(), []
        for start, stop in pairwise(cuts):
            rows = start + rng.permutation(stop - start)
            put_out.append(micro_batch(store, MICROSECONDS[rows], values[rows]))
        out = pd.concat(put_out)
        decisions = out[out.kind == "decision"]
        assert decisions["at"].tolist() == MICROSECONDS.tolist()
        for name in DECIDED:
            expected = [None if x is None else x for x in table[name].to_pylist()]
            actual = [None if pd.isna(x) else x for x in decisions[name]]
            assert actual == expected, name
        events = [json.loads(text) for text in out[out.kind == "event"].text]
        assert events == [dict(event) for event in whole.events if not event.open]
        assert events
        assert store.value is not None
        assert to_bytes(from_bytes(store.value[0])) == to_bytes(whole)


def test_a_repeated_micro_batch_writes_the_same_state() -> None:
    """A task that is run again from the same state, its rows in another order, keeps the same."""
    values = feed(1, SAMPLES)
    values[10] = values[11]
    at = MICROSECONDS.copy()
    at[200:210] = at[200]  # of rows of one time, one is taken
    kept = []
    for seed in range(5):
        store = Store()
        rows = np.random.default_rng(seed).permutation(SAMPLES)
        out = micro_batch(store, at[rows], values[rows])
        assert (out.text == DUPLICATE).sum() == 9
        kept.append(store.value)
    assert kept.count(kept[0]) == len(kept)


def test_rows_out_of_order_are_refused_and_counted() -> None:
    """What is not after the last sample taken changes nothing but the count of refused rows."""
    values = feed(2, SAMPLES)
    store = Store()
    micro_batch(store, MICROSECONDS[:300], values[:300])
    assert store.value is not None
    before = to_bytes(from_bytes(store.value[0]))
    again = np.array([299, 5, 17])
    out = micro_batch(store, MICROSECONDS[again], values[again])
    assert sorted(zip(out["at"], out["text"], strict=True)) == sorted(
        zip(MICROSECONDS[again], [DUPLICATE, LATE, LATE], strict=True)
    )
    assert set(out["kind"]) == {"refused"}
    assert to_bytes(from_bytes(store.value[0])) == before
    out = micro_batch(store, MICROSECONDS[299:302], values[299:302])
    assert out[out.kind == "decision"]["sample"].tolist() == [300, 301]


def test_rows_that_cannot_be_samples_are_refused() -> None:
    """No time and infinite values are told; a good row of the same time is taken instead."""
    values = feed(0, 6)
    values[1, 2] = np.inf
    at = np.array([1.0, 2.0, 2.0, np.nan, 4.0, 1e300])
    out = micro_batch(Store(), at, values, seconds=True)
    refused = out[out.kind == "refused"]
    assert sorted(refused["text"]) == [NO_TIME, NO_TIME, NOT_FINITE]
    assert out[out.kind == "decision"]["at"].tolist() == [1.0, 2.0, 4.0]


def test_rows_without_a_key_touch_no_state() -> None:
    """Rows that belong to no feed are put out as such."""
    store = Store()
    out = micro_batch(store, MICROSECONDS[:3], feed(0, 3), key="")
    assert out["text"].tolist() == [NO_KEY] * 3
    assert store.value is None


def test_nulls_among_whole_numbers_are_no_time() -> None:
    """Spark can be set to hand over whole numbers in a type of pandas' own that holds nulls."""
    rows = pd.DataFrame({"at": MICROSECONDS[:4], "values": list(feed(0, 4))})
    rows["at"] = rows["at"].astype("Int64")
    operator = Watching(to_bytes(NoveltyMonitor(**CONFIG)), seconds=False)
    operator.init(Store())
    (decisions,) = operator.handleInputRows(("=a",), iter([rows]), None)
    assert decisions["at"].tolist() == MICROSECONDS[:4].tolist()
    rows.loc[2, "at"] = pd.NA
    operator.init(Store())
    decisions, refused = operator.handleInputRows(("=a",), iter([rows]), None)
    assert decisions["at"].tolist() == MICROSECONDS[[0, 1, 3]].tolist()
    assert refused["text"].tolist() == [NO_TIME]


def test_times_in_seconds_keep_their_last_bits() -> None:
    """Seconds since 1970 become the nanoseconds that the monitor makes of them."""
    at = np.array([1_772_000_000.123456, 1_772_000_000.123457])
    monitor = NoveltyMonitor(**CONFIG)
    table = monitor.push_many(feed(0, 2), at=at)
    arrived = Arrivals(at, feed(0, 2), seconds=True)
    assert arrived.times.tolist() == table["time"].cast("int64").to_pylist()


def test_an_error_of_the_monitor_names_the_key() -> None:
    """What a monitor refuses ends the query with the name of the feed."""
    values = feed(0, 100)
    values[:, 0] = np.where(np.arange(100) % 2, 1e200, -1e200)
    with pytest.raises(SampleError, match="key 'a': "):
        micro_batch(Store(), MICROSECONDS[:100], values)
