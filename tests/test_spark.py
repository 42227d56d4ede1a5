"""Fleets on Spark: the results of one process, whatever is killed, restarted, late or doubled."""

from __future__ import annotations

import importlib.util
import json
import re
import threading
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from streambasis import (
    Fleet,
    NoveltyMonitor,
    PrincipalBasis,
    StreamBasis,
    from_bytes,
    principal_angles,
    to_bytes,
)
from streambasis.errors import EngineError, SettingError
from streambasis.fleet import spark
from streambasis.fleet.spark_setup import PROVIDER
from tests.fleets import CONFIG, NAMES, fleet_of
from tests.sparks import EXECUTOR, PYTHON, cluster, kill_at_work, need_java

ROOT = Path(__file__).parent.parent
KEYS = ("north", "south", "east", "d.4")
SAMPLES = 480
FILES = 6
START = np.datetime64("2026-03-29T00:30:00", "us")
"""An hour later the clocks of the session's time zone go forward."""
STEP = np.timedelta64(60, "s")
COLUMNS = ("spe", "t2", "limit", "t2_limit", "novel", "extreme", "rank", "event")


@pytest.fixture(scope="module")
def session() -> Iterator[Any]:
    """A driver and two worker processes."""
    need_java()
    with cluster() as made:
        yield made


def times(count: int = SAMPLES) -> np.ndarray:
    """Return one time a sample."""
    return START + np.arange(count) * STEP


def rows(feeds: dict[str, np.ndarray], which: slice) -> pa.Table:
    """Return rows of all feeds with their times."""
    tables = []
    for key, values in feeds.items():
        at = pa.array(times()[which]).cast(pa.timestamp("us", "UTC"))
        columns = {name: values[which, i] for i, name in enumerate(NAMES)}
        tables.append(pa.table({"pump": [key] * len(at), "taken": at, **columns}))
    return pa.concat_tables(tables)


def spoilt(table: pa.Table, old: pa.Table) -> pa.Table:
    """Return rows with others among them that must not be taken, one for each reason."""
    frame = table.to_pandas()
    bad = frame.iloc[[0, 0, 0]].reset_index(drop=True)
    bad.loc[0, "pump"] = None
    bad.loc[1, "taken"] = None
    bad.loc[2, "flow"] = np.inf
    others = [bad, frame.iloc[3:6], old.to_pandas().iloc[:5]]
    return pa.concat_tables(
        [
            table,
            *(pa.Table.from_pandas(rows, table.schema, preserve_index=False) for rows in others),
        ]
    )


@dataclass
class Run:
    """What a stream came to that was disturbed on its way."""

    feeds: dict[str, np.ndarray]
    folder: Path
    killed: list[int] = field(default_factory=list)
    restarts: int = 0
    batches: list[int] = field(default_factory=list)
    trouble: threading.Thread | None = None

    def read(self, name: str) -> list[dict[str, Any]]:
        """Return the rows kept under a name."""
        files = sorted(self.folder.glob(f"{name}/batch=*/*.parquet"))
        return [row for file in files for row in pq.ParquetFile(file).read().to_pylist()]


class PowerCutError(Exception):
    """Raised in the middle of a micro-batch whose output is there and which is not committed."""


@pytest.fixture(scope="module")
def run(session: Any, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """Watch a stream of shuffled files while workers are killed and the query starts again."""
    folder = tmp_path_factory.mktemp("spark")
    made = Run(fleet_of(KEYS, SAMPLES), folder)
    rng = np.random.default_rng(5)
    size = SAMPLES // FILES
    (folder / "in").mkdir()
    old = None
    for number in range(FILES):
        table = rows(made.feeds, slice(number * size, (number + 1) * size))
        schema = table.schema
        if number == FILES - 2:
            table = spoilt(table, old)
        old = table
        pq.write_table(table.take(rng.permutation(len(table))), folder / "in" / f"{number}.parquet")
    stream = session.readStream.schema(session.read.parquet(str(folder / "in")).schema)
    given = stream.option("maxFilesPerTrigger", 1).parquet(str(folder / "in"))
    assert given.columns == schema.names
    watched = spark.watch_stream(given, key="pump", time="taken", channels=NAMES, config=CONFIG)

    def keep(batch: Any, number: int) -> None:
        if number in (1, 2):
            what = EXECUTOR if number == 1 else PYTHON
            made.trouble = threading.Thread(
                target=lambda: made.killed.append(kill_at_work(session, what))
            )
            made.trouble.start()
        batch.persist()
        parts = watched.of(batch)
        for name, frame in (
            ("decisions", parts.decisions), ("events", parts.events), ("refused", parts.refused)
        ):  # fmt: skip
            frame.write.mode("overwrite").parquet(f"{folder}/{name}/batch={number}")
        batch.unpersist()
        if made.trouble is not None:
            made.trouble.join()
        made.batches.append(number)
        if number == 3 and not made.restarts:
            raise PowerCutError

    from pyspark.errors import StreamingQueryException

    for _ in range(2):
        query = (
            watched.output.writeStream.foreachBatch(keep)
            .option("checkpointLocation", str(folder / "checkpoint"))
            .trigger(availableNow=True)
            .start()
        )
        try:
            query.awaitTermination()
        except StreamingQueryException as error:
            if "PowerCutError" not in str(error):
                raise
            made.restarts += 1
    return made


def test_workers_were_killed_and_the_query_began_again(run: Run) -> None:
    """The run below was disturbed: an executor and a Python worker killed, one batch repeated."""
    assert len(run.killed) == 2
    assert run.restarts == 1
    assert run.batches == [0, 1, 2, 3, 3, 4, 5]


def test_decisions_are_those_of_one_process(run: Run) -> None:
    """Every sample has one decision, bit for bit that of a Fleet in one process."""
    whole = rows(run.feeds, slice(None))
    table = Fleet(CONFIG, key="pump", time="taken").push_many(whole)
    expected = sorted(table.to_pylist(), key=lambda row: (row["pump"], row["sample"]))
    actual = sorted(run.read("decisions"), key=lambda row: (row["pump"], row["sample"]))
    assert len(actual) == len(KEYS) * SAMPLES
    for mine, other in zip(actual, expected, strict=True):
        assert [mine[name] for name in ("pump", "sample", *COLUMNS)] == [
            other[name] for name in ("pump", "sample", *COLUMNS)
        ]
        at = times()[mine["sample"]]
        assert np.datetime64(mine["time"].replace(tzinfo=None), "us") == at


def test_events_are_those_of_one_process(run: Run) -> None:
    """Every closed event comes once, as the daemon writes it, and as columns."""
    actual = {(row["pump"], row["event"]): row for row in run.read("events")}
    assert len(actual) == len(run.read("events"))
    count = 0
    for key, values in run.feeds.items():
        monitor = NoveltyMonitor(**CONFIG)
        monitor.push_many(values, at=times())
        for event in monitor.events:
            if event.open:
                continue
            count += 1
            row = actual[key, event["event"]]
            assert json.loads(row["json"]) == dict(event)
            assert row["channels"] == event["channels"]
            assert dict(row["contributions"]) == event["contributions"]
            assert (row["start"], row["end"], row["peak"]) == tuple(
                event[name] for name in ("start", "end", "peak")
            )
    assert count == len(actual) >= len(KEYS)


def test_what_is_not_taken_is_told_with_its_reason(run: Run) -> None:
    """Late and doubled rows, and rows without key, time or finite values, are put out as such."""
    reasons = [(row["pump"], row["reason"]) for row in run.read("refused")]
    assert sorted(reasons, key=str) == sorted(
        [
            (None, "no key"),
            (KEYS[0], "no time"),
            (KEYS[0], "not finite"),
            *[(KEYS[0], "late")] * 5,
            *[(KEYS[0], "duplicate")] * 3,
        ],
        key=str,
    )


def test_the_state_store_holds_each_monitor(run: Run, session: Any) -> None:
    """The snapshot in the checkpoint is that of a monitor that was never disturbed."""
    kept = spark.snapshots(session, f"{run.folder}/checkpoint").collect()
    assert {row["key"] for row in kept} == set(KEYS)
    for row in kept:
        monitor = NoveltyMonitor(**CONFIG)
        monitor.push_many(run.feeds[row["key"]], at=times())
        assert to_bytes(from_bytes(bytes(row["snapshot"]))) == to_bytes(monitor)


@pytest.fixture(scope="module")
def history(session: Any, run: Run) -> Any:
    """The rows of the stream as a table, in partitions that cut across the feeds."""
    pq.write_table(rows(run.feeds, slice(None)), run.folder / "history.parquet")
    return session.read.parquet(f"{run.folder}/history.parquet").repartition(5, "taken")


def test_fit_gives_the_basis_of_each_key(history: Any, run: Run) -> None:
    """By key and in the order of time, to the last bit what one process fits."""
    fitted = spark.fit(
        history, key="pump", channels=NAMES, time="taken", half_life=200.0, centre=True
    )
    assert fitted.dtypes == [
        ("pump", "string"), ("snapshot", "binary"), ("rank", "int"), ("count", "bigint")
    ]  # fmt: skip
    kept = {row["pump"]: row for row in fitted.collect()}
    assert set(kept) == set(KEYS)
    for key, values in run.feeds.items():
        basis = PrincipalBasis(NAMES, half_life=200.0, centre=True)
        basis.take_many(values)
        basis.flush()
        assert bytes(kept[key]["snapshot"]) == to_bytes(basis)
        assert (kept[key]["rank"], kept[key]["count"]) == (basis.rank, SAMPLES)


def test_fit_one_gives_the_basis_of_all_rows(history: Any, run: Run) -> None:
    """Partition by partition and merged, it is the basis of one pass where nothing was cut.

    Sums of squares add: Chan, Golub & LeVeque (1979), Updating formulae and a pairwise algorithm
    for computing sample variances, Stanford STAN-CS-79-773.
    """
    values = np.vstack(list(run.feeds.values()))
    whole = np.where(np.isnan(values), 0, values)
    # what fills a gap depends on what was seen before
    basis = spark.fit_one(history.na.fill(0.0), channels=NAMES, centre=True, rank=3)
    directions = np.linalg.svd(whole - whole.mean(axis=0), full_matrices=False)[2][:3]
    assert basis.count == len(values)
    assert principal_angles(basis, directions).max() < 1e-12
    np.testing.assert_allclose(basis.mean, whole.mean(axis=0), atol=1e-12)


def test_fit_one_keeps_every_direction(history: Any) -> None:
    """The union of spans is that of one StreamBasis; a frame without rows gives an empty one."""
    few = history.where("pump = 'north'").na.fill(0.0).select(*NAMES[:3])
    basis = spark.fit_one(few, channels=NAMES[:3], kind="StreamBasis")
    assert (type(basis), basis.rank, basis.count) == (StreamBasis, 3, SAMPLES)
    assert spark.fit_one(few.where("false"), channels=NAMES[:3]).count == 0


@pytest.mark.parametrize("clock", ["timestamp_ntz", "double"])
def test_a_frame_is_judged_as_a_whole(clock: str, run: Run, history: Any) -> None:
    """Without a stream too, whatever the type of keys and times, through a change of the clocks."""
    from pyspark.sql import functions as F

    same = {
        "double": "unix_micros(taken) / 1e6",
        "timestamp_ntz": "timestampadd(MICROSECOND, unix_micros(taken), TIMESTAMP_NTZ'1970-01-01')",
    }
    given = history.where("pump = 'south'").withColumn("at.time", F.expr(same[clock]))
    given = given.withColumn("pump", F.lit(7).cast("smallint"))
    decisions, _ = spark.watch_stream(
        given, key="pump", time="at.time", channels=NAMES, config=CONFIG
    )
    assert dict(decisions.dtypes)["time"] == clock
    assert dict(decisions.dtypes)["pump"] == "smallint"
    got = sorted(decisions.collect(), key=lambda row: row["sample"])
    whole = NoveltyMonitor(**CONFIG).push_many(run.feeds["south"], at=times())
    assert [row["spe"] for row in got] == whole["spe"].to_pylist()
    at = [row["time"] for row in got]
    if clock == "double":
        assert at == (times().astype(np.int64) / 1e6).tolist()
    else:
        assert np.array(at, "datetime64[us]").tolist() == times().tolist()


def test_what_cannot_be_is_refused_before_spark_begins(session: Any) -> None:
    """Columns and settings are checked at the call; the message names them."""
    frame = session.createDataFrame(
        [("a", 1.0, 2.0, 3.0, "x")], "pump string, at double, u double, v double, s string"
    )
    fine: dict[str, Any] = {"key": "pump", "time": "at", "channels": ["u"]}
    for change, message in [
        ({"key": "valve"}, "key='valve': that column is missing"),
        ({"key": "v"}, "key='v': a column of double"),
        ({"time": "s"}, "time='s': a column of string"),
        ({"channels": ["u", "s"]}, "channel 's': a column of string"),
        ({"channels": ["u", "w"]}, "channel='w': that column is missing"),
        ({"channels": 2}, "name the columns"),
        ({"channels": ["u", "at"]}, "time='at': the time cannot be a channel"),
        ({"config": {"baseline": 3}}, "baseline=3"),
        ({"config": {"base": 3}}, "config: "),
        ({"config": {"channels": ["v"]}}, "other channels"),
    ]:
        with pytest.raises(SettingError) as caught:
            spark.watch_stream(frame, **{**fine, **change})
        assert message in str(caught.value)
    with pytest.raises(SettingError, match="key='rank'"):
        spark.watch_stream(
            frame.withColumnRenamed("pump", "rank"), key="rank", time="at", channels=["u"]
        )
    with pytest.raises(SettingError, match="kind='Fleet': one of"):
        spark.fit(frame, key="pump", channels=["u"], kind="Fleet")
    with pytest.raises(SettingError, match=r"PrincipalBasis: .*'ranks'"):
        spark.fit_one(frame, channels=["u"], ranks=2)
    with pytest.raises(SettingError, match="monitors cannot be merged"):
        spark.fit_one(frame, channels=["u", "at"], kind="NoveltyMonitor")


def test_the_state_store_is_rocksdb(session: Any) -> None:
    """The one that Spark begins with gives way; any other is the user's own and is refused."""
    frame = session.createDataFrame([("a", 1.0, 2.0)], "pump string, at double, u double")
    given: dict[str, Any] = {"key": "pump", "time": "at", "channels": ["u"]}
    before = session.conf.get(PROVIDER)
    try:
        session.conf.set(PROVIDER, "org.example.OurStateStoreProvider")
        with pytest.raises(EngineError, match=r"OurStateStoreProvider.*needs RocksDB"):
            spark.watch_stream(frame, **given)
        session.conf.set(PROVIDER, before.replace("RocksDB", "HDFSBacked"))
        spark.watch_stream(frame, **given)
        assert session.conf.get(PROVIDER) == before
    finally:
        session.conf.set(PROVIDER, before)


def test_the_block_of_the_readme_runs(session: Any, tmp_path: Path) -> None:
    """What README shows of Spark does what it says."""
    blocks = re.findall(r"^```py\n(.*?)^```$", (ROOT / "README.md").read_text(), re.M | re.DOTALL)
    (tmp_path / "arrived").mkdir()
    table = rows(fleet_of(KEYS, SAMPLES), slice(None)).select(["pump", "taken", "flow", "speed"])
    pq.write_table(table.rename_columns(["pump", "time", "flow", "speed"]), tmp_path / "arrived/0")
    assert len(blocks) == 1
    shown: dict[str, Any] = {}
    # where Spark looks for a relative path was settled when its Java began
    exec(blocks[0].replace('"arrived"', f'"{tmp_path}/arrived"'), shown)
    assert shown["session"] is session
    assert shown["decisions"].isStreaming
    assert shown["events"].isStreaming
    assert {row["pump"] for row in shown["bases"].collect()} == set(KEYS)
    assert shown["basis"].count == len(table)


def test_the_example_tells_the_planted_faults(
    session: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Each fault comes out as an event of its pump, with the channel that carries it."""
    assert session is not None
    path = ROOT / "examples" / "fleet_on_spark.py"
    spec = importlib.util.spec_from_file_location("fleet_on_spark", path)
    assert spec is not None
    assert spec.loader is not None
    example = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(example)
    options = ["--home", tmp_path, "--pumps", 5, "--samples", 1200, "--files", 2]
    assert example.main([str(option) for option in options]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("6,000 samples judged, ")
    for pump, channel in (("pump-01", "bearing"), ("pump-03", "current"), ("pump-04", "bearing")):
        assert [line for line in lines if line.startswith(pump) and f"limit  {channel} " in line]
    assert len([line for line in lines if line.startswith("pump-0") and "limit" not in line]) == 5
