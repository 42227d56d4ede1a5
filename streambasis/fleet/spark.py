"""Fleets on Apache Spark: streams watched, history fitted; a monitor or a basis for each key.

Needs the extra ``streambasis[spark]`` here and on every worker. Spark owns the data, the workers,
the checkpoints and the recovery; what it carries for each key is one of our snapshots.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any, Self

from streambasis.errors import SettingError
from streambasis.fleet.spark_columns import (
    EVENT_FIELDS,
    decisions_of,
    events_of,
    key_back,
    key_column,
    put_out_schema,
    refused_of,
    sample_column,
    time_back,
    time_column,
    type_of,
)
from streambasis.fleet.spark_fitting import (
    FITTED,
    PARTIAL,
    Fit,
    fitted_by_key,
    fitted_by_partition,
    flush,
    merge_all,
    merged,
)
from streambasis.fleet.spark_setup import check_environment, session, use_rocksdb
from streambasis.fleet.spark_watching import DECIDED, FEED, Watching
from streambasis.monitor import NoveltyMonitor
from streambasis.samples import Channels
from streambasis.snapshot import to_bytes

if TYPE_CHECKING:
    from pyspark.sql import DataFrame, SparkSession

FAN = 32
"""How many bases are merged into one at a time."""

__all__ = ["Watched", "check_environment", "fit", "fit_one", "session", "snapshots", "watch_stream"]


class Watched(tuple["DataFrame", "DataFrame"]):
    """What a watched stream gives: a pair of frames, decisions and events, and what they are of.

    Attributes
    ----------
    decisions : DataFrame
        The key, then the decision columns, one row per sample taken; ``time`` has the type of the
        stream's own times.
    events : DataFrame
        The key, a column for each key of an event, and ``json``, the event as one JSON object;
        one row per event, when it has closed.
    refused : DataFrame
        Key, time and ``reason`` of each row that was not taken as a sample.
    output : DataFrame
        The rows of all three: what the stateful operator puts out.
    """

    decisions: DataFrame
    events: DataFrame
    refused: DataFrame
    output: DataFrame
    _key: str

    def __new__(cls, output: DataFrame, key: str) -> Self:
        decisions, events = decisions_of(output, key), events_of(output, key)
        self = super().__new__(cls, (decisions, events))
        self.decisions, self.events = decisions, events
        self.refused, self.output = refused_of(output, key), output
        self._key = key
        return self

    def of(self, batch: DataFrame) -> Watched:
        """Return decisions, events and refused rows of one micro-batch of :attr:`output`.

        For ``output.writeStream.foreachBatch``, whose function is handed such a batch.
        """
        return Watched(batch, self._key)


def watch_stream(
    df: DataFrame,
    *,
    key: str,
    time: str,
    channels: Iterable[str],
    config: Mapping[str, Any] | None = None,
) -> Watched:
    """Watch every feed of a stream of Spark's with a monitor of its own.

    Parameters
    ----------
    df : pyspark.sql.DataFrame
        A streaming frame, one row per sample. A frame that is not streaming is judged as a whole.
    key : str
        The column that tells the feeds apart: text or whole numbers.
    time : str
        The column of event times: timestamps (those without a zone count as UTC), or numbers of
        seconds.
    channels : sequence of str
        The columns of the channels, numbers; null and NaN mark what is missing.
    config : mapping, optional
        The keywords of :class:`~streambasis.NoveltyMonitor`, which hold for every feed.

    Returns
    -------
    Watched
        The pair (decisions, events), both streaming where ``df`` is; its ``refused`` are the rows
        that were not taken, its ``output`` the rows of all kinds together.

    Raises
    ------
    EngineError
        If Spark lacks what a stateful operator needs: protobuf, a pandas below 3, a state store
        in RocksDB. The session is set to that where it still has the one that Spark begins with,
        which cannot hold such a state.
    SettingError
        If a column is missing or of no possible type, or the configuration is refused.

    Notes
    -----
    Advisory: not a protective or safety-instrumented function.

    **Order.** Samples of a feed are taken in the order of their event times. Within a micro-batch
    rows are sorted. A row whose time is not after that of the last sample taken of its key is not
    taken: it is in ``refused`` with the reason ``duplicate`` (the same time) or ``late`` (an
    earlier one, sent again or out of order), and counted in the state. A micro-batch is therefore
    as far as samples can be put in order; where a source mixes further, sort in front of it. Also
    refused are rows with ``no time``, with ``no key``, and with a value ``not finite``.

    **Recovery.** The state of a feed is a snapshot in Spark's state store, true together with the
    micro-batch that made it. From a source that can be replayed a killed worker, or a query begun
    again from its checkpoint, gives what would have come without, bit for bit, on the same kind
    of machine. Where micro-batches are cut makes no difference but for rows out of order.

    **Writing both.** One operator does the work and puts out rows of all kinds; decisions and
    events are selections. Every query that is started does the whole work and keeps a checkpoint
    of its own, so to keep more than one of them start one query on ``output``, with
    ``foreachBatch``, and let :meth:`Watched.of` part each batch (``persist`` it first):
    examples/fleet_on_spark.py.

    **Cost.** Every key with rows in a micro-batch costs some milliseconds and one read and one
    write of its state, 30 KB to 2 MB, whatever the number of its rows. Long micro-batches
    (``trigger(processingTime=...)``) are cheaper than short ones.
    """
    check_environment()
    use_rocksdb(df)
    names, start = _started(channels, config)
    taken = {"kind", "time", "text", "json", "reason", *DECIDED}
    taken |= {field.split()[0] for field in EVENT_FIELDS.split(", ") if " " in field}
    if key in taken:
        raise SettingError(f"key={key!r}: a column of that name is among those put out; rename it")
    for name, what in ((key, "key"), (time, "time")):
        if name in names:
            raise SettingError(f"{what}={name!r}: the {what} cannot be a channel as well")
    at, clock = time_column(df, time)
    seconds = not clock.startswith("timestamp")
    rows = df.select(
        key_column(df, key).alias("key"), at.alias("at"), sample_column(df, names).alias("values")
    )
    put_out = rows.groupBy("key").transformWithStateInPandas(
        Watching(start, seconds=seconds), put_out_schema(seconds=seconds), "Append", "None"
    )
    kind = type_of(df, key, "key")
    output = put_out.select(
        "kind", key_back(kind).alias(key), time_back(clock).alias("time"), *DECIDED, "text"
    )
    return Watched(output, key)


def _started(
    channels: Iterable[str], config: Mapping[str, Any] | None
) -> tuple[tuple[str, ...], bytes]:
    """Return names of channels, and a snapshot of the monitor that each feed begins with."""
    found = Channels(channels)
    if not found.named:
        raise SettingError(f"channels={channels!r}: name the columns of the channels")
    settings = dict(config or {})
    given = Channels(settings.pop("channels", found.names))
    if given.names != found.names:
        raise SettingError(f"config: other channels than channels={list(found.names)}")
    try:
        monitor = NoveltyMonitor(found.names, **settings)
    except TypeError as error:
        raise SettingError(f"config: {error}") from None
    return found.names, to_bytes(monitor)


def snapshots(spark: SparkSession, checkpoint: str) -> DataFrame:
    """Return the snapshot of each feed of a watched stream, as of its last micro-batch.

    Parameters
    ----------
    spark : pyspark.sql.SparkSession
    checkpoint : str
        The ``checkpointLocation`` of the query; it may be running.

    Returns
    -------
    DataFrame
        ``key``, as text, and ``snapshot``, of which :func:`streambasis.from_bytes` makes the
        monitor: to see its open events, its drift, or to save it.
    """
    from pyspark.sql import functions as F

    store = spark.read.format("statestore").option("stateVarName", FEED).load(checkpoint)
    held = store.select(F.col("key.key").alias("key"), "value.snapshot")
    return held.select(key_back("string").alias("key"), "snapshot")


def fit(
    df: DataFrame,
    *,
    key: str,
    channels: Iterable[str],
    time: str | None = None,
    kind: str = "PrincipalBasis",
    **settings: Any,
) -> DataFrame:
    """Fit a basis, or a monitor, for each key on its history.

    Parameters
    ----------
    df : pyspark.sql.DataFrame
        The history, one row per sample; rows without a key are left out.
    key : str
        The column that tells the feeds apart: text or whole numbers.
    channels : sequence of str
        The columns of the channels, numbers; null and NaN mark what is missing.
    time : str, optional
        The column whose order is that of the samples. Without it their order is Spark's, and
        results may differ from run to run by rounding, or by more where samples are forgotten.
    kind : {"PrincipalBasis", "StreamBasis", "NoveltyMonitor"}
        What is fitted.
    **settings
        The keywords of that class.

    Returns
    -------
    DataFrame
        The key, ``snapshot`` (of which :func:`streambasis.from_bytes` makes the object), ``rank``
        and ``count``, the samples it has seen.

    Raises
    ------
    EngineError
        If Spark lacks what it needs.
    SettingError
        If a column is missing or of no possible type, or a setting is refused.

    Notes
    -----
    One shuffle by key, sorted within; rows go to Python as Arrow. A worker holds one basis and
    one batch of rows at a time, however long a history is.
    """
    check_environment()
    what = _fit(kind, channels, settings)
    rows = [key_column(df, key).alias("key"), sample_column(df, what.channels).alias("values")]
    order = ["key"]
    if time is not None:
        at, _ = time_column(df, time)
        rows.append(at.alias("at"))
        # rows of one time by their values, so that every run takes them in the same order
        order += ["at", "values"]
    given = df.select(*rows).where("key != ''").repartition("key").sortWithinPartitions(*order)
    fitted = given.select("key", "values").mapInArrow(fitted_by_key(what), FITTED)
    back = key_back(type_of(df, key, "key")).alias(key)
    return fitted.select(back, "snapshot", "rank", "count")


def fit_one(
    df: DataFrame, *, channels: Iterable[str], kind: str = "PrincipalBasis", **settings: Any
) -> Any:
    """Fit one basis on all rows of a frame, by partition, and merge these in a tree.

    Parameters
    ----------
    df : pyspark.sql.DataFrame
        One huge feed, one row per sample.
    channels : sequence of str
        The columns of the channels, numbers; null and NaN mark what is missing.
    kind : {"PrincipalBasis", "StreamBasis"}
        What is fitted.
    **settings
        The keywords of that class.

    Returns
    -------
    PrincipalBasis or StreamBasis
        As if the partitions had come one after another, in their order; see
        :func:`streambasis.merge` for how far that equals one run over all rows. Of a frame
        without rows, a basis that has seen nothing.

    Raises
    ------
    EngineError
        If Spark lacks what it needs.
    SettingError
        If a column is missing or of no possible type, or a setting is refused.

    Notes
    -----
    The rows are read once, where they lie; what moves is one snapshot of each partition. The tree
    has ``FAN``-fold nodes on two levels in the cluster, and what is left of ``FAN²`` partitions
    each is merged here.
    """
    from pyspark.sql import functions as F

    check_environment()
    what = _fit(kind, channels, settings)
    empty = what.make()
    if kind == "NoveltyMonitor":
        raise SettingError("kind='NoveltyMonitor': monitors cannot be merged; fit() makes them")
    values = sample_column(df, what.channels).alias("values")
    rows = df.select(values, F.spark_partition_id().alias("part"))
    parts = rows.mapInArrow(fitted_by_partition(what), PARTIAL)
    for width in (FAN, FAN * FAN):
        group = F.floor(F.col("part") / width)
        parts = parts.groupBy(group).applyInArrow(merged, PARTIAL)
    left = sorted(parts.collect(), key=lambda row: int(row["part"]))
    if not left:
        return empty
    basis = merge_all([bytes(row["snapshot"]) for row in left])
    flush(basis)
    return basis


def _fit(kind: str, channels: Iterable[str], settings: dict[str, Any]) -> Fit:
    found = Channels(channels)
    if not found.named:
        raise SettingError(f"channels={channels!r}: name the columns of the channels")
    what = Fit(kind, found.names, settings)
    what.make()
    return what
