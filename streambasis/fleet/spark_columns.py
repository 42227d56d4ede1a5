"""Columns on their way into Spark's workers and out again: keys, times, samples."""

from __future__ import annotations

from typing import TYPE_CHECKING

from streambasis.errors import SettingError
from streambasis.fleet.spark_watching import DECIDED, DECISION, EVENT, REFUSED

if TYPE_CHECKING:
    from pyspark.sql import Column, DataFrame

WHOLE = ("tinyint", "smallint", "int", "bigint")
NUMBERS = (*WHOLE, "float", "double", "boolean")

MARK = "="
"""Before each key in the text that feeds are told apart by; a row without a key has no text."""

EVENT_FIELDS = (
    "event bigint, start bigint, end bigint, start_time string, end_time string, peak double, "
    "channels array<string>, contributions map<string, double>, repeats bigint, cosine double, "
    "label string"
)
"""The keys of an event, and what Spark calls their types."""


def column(name: str) -> Column:
    """Return the column of exactly this name, dots and all."""
    from pyspark.sql import functions as F

    return F.col("`" + name.replace("`", "``") + "`")


def type_of(frame: DataFrame, name: str, what: str) -> str:
    """Return what Spark calls the type of a column.

    Raises
    ------
    SettingError
        If there is no such column, or more than one.
    """
    found = [kind for other, kind in frame.dtypes if other == name]
    if len(found) != 1:
        times = "is missing" if not found else f"comes {len(found)} times"
        raise SettingError(
            f"{what}={name!r}: that column {times}; there are {', '.join(frame.columns)}"
        )
    return str(found[0])


def sample_column(frame: DataFrame, channels: tuple[str, ...]) -> Column:
    """Return the channels as one column of arrays, nulls for what is missing.

    Raises
    ------
    SettingError
        If a channel is not a column of numbers.
    """
    from pyspark.sql import functions as F

    for name in channels:
        kind = type_of(frame, name, "channel")
        if kind not in NUMBERS and not kind.startswith("decimal"):
            raise SettingError(f"channel {name!r}: a column of {kind}, expected numbers")
    # one array a row is handed over many times faster than as many columns
    return F.array(*(column(name).cast("double") for name in channels))


def key_column(frame: DataFrame, key: str) -> Column:
    """Return keys as text: a mark and the key, or nothing where a row has none.

    Raises
    ------
    SettingError
        If keys are neither text nor whole numbers.
    """
    from pyspark.sql import functions as F

    kind = type_of(frame, key, "key")
    if kind not in ("string", *WHOLE):
        raise SettingError(f"key={key!r}: a column of {kind}; keys are text or whole numbers")
    return F.coalesce(F.concat(F.lit(MARK), column(key).cast("string")), F.lit(""))


def key_back(kind: str) -> Column:
    """Return keys of their own type again, from the column ``key``."""
    from pyspark.sql import functions as F

    text = F.when(F.col("key") != "", F.substring("key", len(MARK) + 1, 2**31 - 1))
    return text.cast(kind)


def time_column(frame: DataFrame, time: str) -> tuple[Column, str]:
    """Return times as microseconds since 1970, or as seconds, and the type they had.

    Raises
    ------
    SettingError
        If times are neither timestamps nor numbers of seconds.

    Notes
    -----
    Numbers are not moved by the time zone of a session, as timestamps are on their way to Python.
    """
    from pyspark.sql import functions as F

    kind = type_of(frame, time, "time")
    if kind == "timestamp":
        return F.unix_micros(column(time)), kind
    if kind == "timestamp_ntz":
        # a time without a zone counts as UTC, whatever the zone of the session
        zoned = F.concat(column(time).cast("string"), F.lit("Z")).cast("timestamp")
        return F.unix_micros(zoned), kind
    if kind in NUMBERS or kind.startswith("decimal"):
        return column(time).cast("double"), kind
    raise SettingError(
        f"time={time!r}: a column of {kind}; times are timestamps or numbers of seconds"
    )


def time_back(kind: str) -> Column:
    """Return times of their own type again, from the column ``at``."""
    from pyspark.sql import functions as F

    if kind == "timestamp":
        return F.timestamp_micros(F.col("at"))
    if kind == "timestamp_ntz":
        return F.expr("timestampadd(MICROSECOND, at, TIMESTAMP_NTZ'1970-01-01 00:00:00')")
    return F.col("at").cast(kind)


def put_out_schema(*, seconds: bool) -> str:
    """Return the schema of the rows of all kinds, as Spark writes it."""
    decided = ", ".join(f"{name} {kind}" for name, kind in DECIDED.items())
    at = "double" if seconds else "bigint"
    return f"kind string, key string, at {at}, {decided}, text string"


def decisions_of(output: DataFrame, key: str) -> DataFrame:
    """Return the decisions among rows of all kinds."""
    first, *others = DECIDED
    names = [column(name) for name in (key, first, "time", *others)]
    return output.where(output["kind"] == DECISION).select(*names)


def events_of(output: DataFrame, key: str) -> DataFrame:
    """Return the events among rows of all kinds, a column for each of their keys."""
    from pyspark.sql import functions as F

    rows = output.where(output["kind"] == EVENT)
    told = rows.select(column(key), F.from_json("text", EVENT_FIELDS).alias("told"), "text")
    return told.select(column(key), "told.*", F.col("text").alias("json"))


def refused_of(output: DataFrame, key: str) -> DataFrame:
    """Return what was not taken among rows of all kinds, and why."""
    rows = output.where(output["kind"] == REFUSED)
    return rows.select(column(key), "time", rows["text"].alias("reason"))
