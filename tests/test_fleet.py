"""Fleets: every feed as if it had a monitor of its own."""

from __future__ import annotations

import threading
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from streambasis import Fleet, NoveltyMonitor, StreambasisError
from streambasis.errors import FleetError, SampleError, SampleTypeError, SettingError
from tests.fleets import CONFIG, NAMES, apart, feed, fleet_of, mixed, of_key, table_of

SAMPLES = 400
KEYS = ["north", "south", "west", "east", "middle"]
FEEDS = fleet_of(KEYS, SAMPLES)
TOTAL = SAMPLES * len(KEYS)


@pytest.fixture(scope="module")
def expected() -> dict[Any, tuple[pa.Table, list[Any]]]:
    """Return decisions and events of a monitor for each feed."""
    found = apart(FEEDS)
    assert all(len(events) >= 1 for _, events in found.values())
    return found


def assert_as_apart(
    fleet: Fleet, tables: list[pa.Table], expected: dict[Any, tuple[pa.Table, list[Any]]]
) -> None:
    """Compare decisions and events with those of separate monitors, bit for bit."""
    for key, (decisions, events) in expected.items():
        assert of_key(tables, key).equals(decisions.combine_chunks()), key
        assert fleet.events[key] == events, key


@settings(max_examples=12, deadline=None)
@given(
    cuts=st.lists(st.integers(0, TOTAL), max_size=12),
    threads=st.integers(1, 3),
    live=st.one_of(st.none(), st.integers(1, 6)),
    seed=st.integers(0, 2**32 - 1),
)
def test_results_are_those_of_separate_monitors(
    cuts: list[int],
    threads: int,
    live: int | None,
    seed: int,
    expected: dict[Any, tuple[pa.Table, list[Any]]],
) -> None:
    """However rows are mixed and cut, for any number of threads and of monitors in memory."""
    with Fleet(CONFIG, key="pump", threads=threads, live=live) as fleet:
        tables = []
        for table in mixed(FEEDS, cuts, np.random.default_rng(seed)):
            tables.append(fleet.push_many(table))
            assert tables[-1]["pump"].equals(table["pump"])
            assert fleet.live <= (live or len(KEYS))
        assert_as_apart(fleet, tables, expected)


@settings(max_examples=8, deadline=None)
@given(
    cuts=st.lists(st.integers(0, TOTAL), min_size=1, max_size=8),
    again=st.sets(st.integers(0, 8), min_size=1),
    live=st.one_of(st.none(), st.integers(1, 6)),
    seed=st.integers(0, 2**32 - 1),
)
def test_going_on_from_a_commit_is_invisible(
    cuts: list[int],
    again: set[int],
    live: int | None,
    seed: int,
    expected: dict[Any, tuple[pa.Table, list[Any]]],
    tmp_path_factory: pytest.TempPathFactory,
) -> None:
    """What was taken since the last commit is lost with the process; the rest goes on."""
    home = tmp_path_factory.mktemp("fleet")
    batches = mixed(FEEDS, cuts, np.random.default_rng(seed))
    fleet = Fleet(CONFIG, key="pump", live=live, home=home)
    tables: list[pa.Table] = []
    for number, batch in enumerate(batches):
        if number in again:
            fleet.push_many(batch)  # never committed
            fleet.close()
            fleet = Fleet(CONFIG, key="pump", live=live, home=home)
            assert fleet.position == (number or None)
        tables.append(fleet.push_many(batch))
        fleet.commit(number + 1)
    assert_as_apart(fleet, tables, expected)
    fleet.close()


def test_columns_are_the_key_and_then_the_decisions() -> None:
    """The table has the key column as it was given, then the decision columns."""
    with Fleet(CONFIG, key="pump") as fleet:
        batch = table_of(["north", "south"], feed(0, 2))
        batch = batch.set_column(0, "pump", batch["pump"].dictionary_encode())
        decisions = fleet.push_many(batch)
    alone = NoveltyMonitor(**CONFIG).push_many(feed(0, 2))
    assert decisions.column_names == ["pump", *alone.column_names]
    assert decisions.schema.field("pump").type == batch.schema.field("pump").type
    assert decisions.drop_columns("pump").schema == alone.schema
    assert decisions["sample"].to_pylist() == [0, 0]


def test_an_empty_batch_gives_an_empty_table() -> None:
    """No rows in, no rows out, with the columns of any other answer."""
    with Fleet(CONFIG, key="pump") as fleet:
        empty = fleet.push_many(table_of(["north"], feed(0, 1)).slice(1))
        one = fleet.push_many(table_of(["north"], feed(0, 1)))
    assert (len(empty), empty.schema) == (0, one.schema)


@pytest.mark.parametrize(
    "library",
    [
        lambda table: table,
        lambda table: table.combine_chunks().to_batches()[0],
        lambda table: pl.from_arrow(table),
        lambda table: table.to_pandas(),
        lambda table: duckdb.from_arrow(table),
    ],
    ids=["pyarrow", "record batch", "polars", "pandas", "duckdb"],
)
def test_tables_of_any_library(
    library: Any, expected: dict[Any, tuple[pa.Table, list[Any]]]
) -> None:
    """Whatever speaks the Arrow PyCapsule protocol gives the same decisions."""
    with Fleet(CONFIG, key="pump") as fleet:
        tables = [
            fleet.push_many(library(table))
            for table in mixed(FEEDS, [700], np.random.default_rng(1))
        ]
        tables = [t.set_column(0, "pump", t["pump"].cast(pa.string())) for t in tables]
        assert_as_apart(fleet, tables, expected)


@pytest.mark.parametrize("kind", [pa.int8(), pa.uint16(), pa.int64()])
def test_whole_numbers_are_keys(kind: pa.DataType, expected: Any) -> None:
    """Keys may be whole numbers; they are the same key in any width."""
    feeds = {number: FEEDS[key] for number, key in enumerate(KEYS)}
    with Fleet(CONFIG, key="pump", live=2) as fleet:
        tables = []
        for i, table in enumerate(mixed(feeds, [500, 900], np.random.default_rng(2))):
            if i == 1:
                table = table.set_column(0, "pump", table["pump"].cast(kind))
            answer = fleet.push_many(table)
            tables.append(answer.set_column(0, "pump", answer["pump"].cast(pa.int64())))
        assert sorted(fleet.keys) == list(range(len(KEYS)))
        assert_as_apart(fleet, tables, dict(zip(feeds, expected.values(), strict=True)))


def test_channels_that_are_only_counted_are_taken_in_their_order() -> None:
    """With a number of channels, the columns beside key and time are the channels."""
    config = {**CONFIG, "channels": len(NAMES)}
    values = feed(3, 300)
    with Fleet(config, key="pump") as fleet:
        table = table_of(["north"] * 300, values, names=[f"column {i}" for i in range(6)])
        decisions = fleet.push_many(table)
    assert of_key([decisions], "north").equals(
        NoveltyMonitor(**config).push_many(values).combine_chunks()
    )


@pytest.mark.parametrize("given", ["column", "named column", "at"])
def test_times_come_from_a_column_or_beside_the_table(given: str) -> None:
    """A column named time is the time; another is named; or the times are given by themselves."""
    values = feed(0, 200)
    times = np.datetime64("2026-03-02T00:00:00", "ns") + 10**9 * np.arange(200)
    expected = NoveltyMonitor(**CONFIG).push_many(values, at=times).combine_chunks()
    table = table_of(["north"] * 200, values)
    name = {"column": "time", "named column": "taken_at", "at": None}[given]
    if name is not None:
        table = table.append_column(name, pa.array(times))
    with Fleet(CONFIG, key="pump", time=None if name == "time" else name) as fleet:
        decisions = fleet.push_many(table, at=times if name is None else None)
    assert of_key([decisions], "north").equals(expected)


def test_a_baseline_of_samples_holds_for_every_feed(tmp_path: Path) -> None:
    """Given as samples, the baseline is learnt once, and feeds are judged from their first row."""
    config = {**CONFIG, "baseline": feed(9, 500)}
    expected = apart(FEEDS, config)
    with Fleet(config, key="pump", home=tmp_path, live=2) as fleet:
        tables = [fleet.push_many(t) for t in mixed(FEEDS, [300], np.random.default_rng(3))]
        assert_as_apart(fleet, tables, expected)
    with pytest.raises(StreambasisError, match="baseline"):
        Fleet({**config, "baseline": feed(8, 500)}, key="pump", home=tmp_path)


def test_one_sample_at_a_time() -> None:
    """push judges one sample of one feed as its monitor would."""
    with Fleet(CONFIG, key="pump", live=1) as fleet:
        alone = {key: NoveltyMonitor(**CONFIG) for key in KEYS[:2]}
        for i in range(100):
            for key in KEYS[:2]:
                assert repr(fleet.push(key, FEEDS[key][i])) == repr(alone[key].push(FEEDS[key][i]))


def whole_state(fleet: Fleet) -> dict[Any, bytes]:
    """Return everything that every feed is."""
    from streambasis import to_bytes

    return {key: to_bytes(fleet.monitor(key)) for key in fleet.keys}


def changed(column: str, row: int, value: Any, kind: pa.DataType | None = None) -> Any:
    """Return a function that puts a value into a table."""

    def change(table: pa.Table) -> pa.Table:
        values = table[column].to_pylist()
        values[row] = value
        return table.set_column(
            table.column_names.index(column), column, pa.array(values, kind or table[column].type)
        )

    return change


REFUSED = {
    "infinite value": (changed("speed", 7, np.inf), ["row 7", "'south'", "'speed'", "inf"]),
    "null key": (changed("pump", 5, None), ["'pump'", "row 5", "missing"]),
    "key that is no key": (
        lambda t: t.set_column(0, "pump", t["pump"].cast(pa.binary())), ["'pump'", "binary"],
    ),
    "no key column": (lambda t: t.drop_columns("pump"), ["'pump'", "missing", "flow"]),
    "two key columns": (lambda t: t.append_column("pump", t["pump"]), ["'pump'", "2 times"]),
    "missing channel": (lambda t: t.drop_columns("winding"), ["'winding'", "missing"]),
    "channel of text": (
        lambda t: t.set_column(1, "flow", pa.array(["much"] * len(t))), ["'flow'", "string"],
    ),
    "time that is none": (
        lambda t: t.append_column("time", pa.array([None, *range(len(t) - 1)], pa.float64())),
        ["row 0", "time"],
    ),
    "no table": (lambda _: np.zeros((3, 6)), ["ndarray", "'pump'"]),
}  # fmt: skip


@pytest.mark.parametrize("case", REFUSED)
def test_a_refused_batch_changes_no_feed(case: str) -> None:
    """A batch is checked before any of it is taken, and the message names what is wrong."""
    change, words = REFUSED[case]
    with Fleet(CONFIG, key="pump", live=3) as fleet:
        fleet.push_many(table_of(["north", "south"] * 100, feed(0, 200)))
        before = whole_state(fleet)
        batch = table_of(["new", "south", "north"] * 40, feed(1, 120))
        if case == "infinite value":
            assert batch["pump"][7].as_py() == "south"
        with pytest.raises((SampleError, SampleTypeError)) as refusal:
            fleet.push_many(change(batch))
        assert [word for word in words if word not in str(refusal.value)] == []
        assert whole_state(fleet) == before
        assert fleet.keys == ("north", "south")
        fleet.push_many(batch)


@pytest.mark.parametrize("live", [None, 1, 2])
def test_a_baseline_that_cannot_be_learnt_changes_no_feed(live: int | None) -> None:
    """Noise beyond double precision shows only in learning; the batch is refused as a whole."""
    values = feed(0, 60)
    tiny = values.copy()
    tiny[:, 2] = 1e-170 * np.random.default_rng(0).normal(size=60)
    with Fleet(CONFIG, key="pump", live=live) as fleet:
        keys = ["north"] * 60 + ["odd"] * 60 + ["south"] * 20
        fleet.push_many(table_of(keys, np.vstack([values, tiny, values[:20]])))
        before = whole_state(fleet)
        keys = ["north"] * 20 + ["odd"] * 60 + ["south"] * 20 + ["new"] * 80
        rows = np.vstack([values[:20], tiny, values[:20], values, values[:20]])
        batch = table_of(keys, rows)
        with pytest.raises(SampleError, match=r"'odd'.*'speed'"):
            fleet.push_many(batch)
        assert whole_state(fleet) == before
        assert fleet.keys == ("north", "odd", "south")
        rest = batch.slice(0, 20)
        alone = NoveltyMonitor(**CONFIG)
        alone.push_many(values)
        assert of_key([fleet.push_many(rest)], "north").equals(
            alone.push_many(values[:20]).combine_chunks()
        )


def test_labels_and_adopted_behaviour_belong_to_a_feed() -> None:
    """label and adopt change the feed named, also when it is parked, and no other."""
    with Fleet(CONFIG, key="pump", live=1) as fleet:
        fleet.push_many(mixed(FEEDS, [], np.random.default_rng(4))[0])
        fleet.label("north", 0, "bearing")
        fleet.adopt("south", 0)
        assert fleet.events["north"][0]["label"] == "bearing"
        assert fleet.events["west"][0]["label"] is None
        assert fleet.monitor("south").adopted == (0,) * len(fleet["south"].adopted)
        assert fleet["west"].adopted == ()
        fleet.finish()
        assert not any(event.open for events in fleet.events.values() for event in events)
        with pytest.raises(SettingError, match="'nowhere'"):
            fleet.label("nowhere", 0, "x")


def test_a_copy_of_a_monitor_leaves_the_fleet_alone() -> None:
    """What is pushed to a monitor that was handed out does not reach the fleet."""
    with Fleet(CONFIG, key="pump") as fleet:
        fleet.push_many(table_of(["north"] * 100, feed(0, 100)))
        before = whole_state(fleet)
        fleet["north"].push_many(feed(1, 50))
        assert whole_state(fleet) == before


@pytest.mark.parametrize(
    ("named", "words"),
    [
        ({"config": {"baseline": 64}}, "channels"),
        ({"config": {**CONFIG, "colour": 1}}, "colour"),
        ({"config": {**CONFIG, "quiet": 0}}, "quiet"),
        ({"key": "flow"}, "'flow'"),
        ({"key": "spe"}, "'spe'"),
        ({"time": "flow"}, "'flow'"),
        ({"time": "pump"}, "'pump'"),
        ({"threads": 0}, "threads=0"),
        ({"live": 0}, "live=0"),
    ],
)
def test_settings_that_cannot_be_are_refused(named: dict[str, Any], words: str) -> None:
    """A fleet names the setting that it refuses."""
    given = {"config": CONFIG, "key": "pump", **named}
    with pytest.raises(SettingError, match=words):
        Fleet(given.pop("config"), **given)


def test_a_closed_fleet_says_so() -> None:
    """After close nothing is taken; closing twice is fine."""
    fleet = Fleet(CONFIG, key="pump", live=1)
    fleet.close()
    fleet.close()
    with pytest.raises(FleetError, match="closed"):
        fleet.push_many(table_of(["north"], feed(0, 1)))


def test_threads_of_the_caller_do_not_corrupt_a_fleet() -> None:
    """Two threads that push different feeds to one fleet get what separate monitors say."""
    feeds = fleet_of(["north", "south"], 300)
    expected = apart(feeds)
    answers: dict[str, list[pa.Table]] = {key: [] for key in feeds}
    with Fleet(CONFIG, key="pump", live=1) as fleet:

        def push(key: str) -> None:
            for start in range(0, 300, 25):
                part = feeds[key][start : start + 25]
                answers[key].append(fleet.push_many(table_of([key] * len(part), part)))

        callers = [threading.Thread(target=push, args=(key,)) for key in feeds]
        for caller in callers:
            caller.start()
        for caller in callers:
            caller.join()
        assert_as_apart(fleet, [t for tables in answers.values() for t in tables], expected)


def test_nbytes_counts_the_monitors_in_memory() -> None:
    """nbytes is the sum over the monitors in memory, and the values of the largest batch."""
    with Fleet(CONFIG, key="pump", live=2) as fleet:
        fleet.push_many(mixed(FEEDS, [], np.random.default_rng(5))[0])
        assert (len(fleet), fleet.live) == (len(KEYS), 2)
        two = fleet.nbytes - TOTAL * len(NAMES) * 8
        sizes = [fleet[key].nbytes for key in KEYS]
        assert min(sizes) * 2 <= two <= max(sizes) * 2
