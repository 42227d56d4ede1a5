"""What Apache Spark needs around it, looked at before it fails without saying why."""

from __future__ import annotations

import importlib
import importlib.metadata
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from streambasis.errors import EngineError

if TYPE_CHECKING:
    from pyspark.sql import DataFrame, SparkSession

LEAST_SPARK = (4, 0)
LEAST_JAVA = 17
PANDAS = ((2, 2), (3, 0))
"""From which version on, and below which."""

MESSAGES = "pyspark.sql.streaming.proto.StateMessage_pb2"
INSTALL = "pip install 'streambasis[spark]'"
PROVIDER = "spark.sql.streaming.stateStore.providerClass"
ROCKSDB = "org.apache.spark.sql.execution.streaming.state.RocksDBStateStoreProvider"
NO_USE = "HDFSBackedStateStoreProvider"
"""What Spark begins with, and what cannot hold the state of operators such as ours."""

SETTINGS = {
    PROVIDER: ROCKSDB,
    # without it each commit of a partition uploads whole files of its store
    "spark.sql.streaming.stateStore.rocksdb.changelogCheckpointing.enabled": "true",
    # matrix products round differently on another number of BLAS threads
    "spark.executorEnv.OPENBLAS_NUM_THREADS": "1",
}
PARTITIONS_PER_CORE = 2


def check_environment(*, java: bool = False) -> None:
    """Refuse an environment in which Spark would die without a useful message.

    Parameters
    ----------
    java : bool
        Whether a Java is looked for as well, which only the process that starts Spark needs.

    Raises
    ------
    EngineError
        If pyspark, pandas, protobuf or Java is missing or of a version that does not work; the
        message says which one to install.
    """
    spark = _version("pyspark", "Apache Spark itself")
    if spark < LEAST_SPARK:
        raise EngineError(
            f"pyspark {_dotted(spark)}: streams with a state of their own in Python need "
            f"{_dotted(LEAST_SPARK)} or later; {INSTALL}"
        )
    pandas = _version("pandas", "Spark hands rows to a stateful operator as pandas frames")
    least, below = PANDAS
    if not least <= pandas < below:
        raise EngineError(
            f"pandas {_dotted(pandas)}: Spark's stateful operators work with pandas from "
            f"{_dotted(least)} to below {_dotted(below)}; pip install 'pandas<{below[0]}'"
        )
    _check_protobuf()
    if java:
        _check_java()


def _version(package: str, why: str) -> tuple[int, ...]:
    try:
        text = importlib.metadata.version(package)
    except importlib.metadata.PackageNotFoundError:
        raise EngineError(f"{package} is not installed ({why}): {INSTALL}") from None
    return tuple(int(part) for part in re.findall(r"\d+", text)[:2])


def _check_protobuf() -> None:
    """Load the messages that a stateful operator and its state store exchange."""
    found = _version("protobuf", "a stateful operator talks to its state store through it")
    try:
        importlib.import_module(MESSAGES)
    except Exception as error:  # protobuf has an error of its own for messages of later versions
        raise EngineError(
            f"protobuf {_dotted(found)} cannot load the messages of this pyspark ({error}): "
            "pip install -U protobuf"
        ) from error


def _dotted(version: tuple[int, ...]) -> str:
    return ".".join(str(part) for part in version)


def _check_java() -> None:
    home = os.environ.get("JAVA_HOME")
    program = shutil.which("java", path=os.path.join(home, "bin") if home else None)
    where = f"JAVA_HOME={home}" if home else "PATH"
    way_out = f"install Java {LEAST_JAVA} or later (such as openjdk-17-jre-headless)"
    if program is None:
        raise EngineError(f"no java in {where}, and Spark runs on it: {way_out}, or set JAVA_HOME")
    shown = subprocess.run([program, "-version"], capture_output=True, text=True, check=False)
    found = re.search(r'version "(?:1\.)?(\d+)', shown.stderr)
    if shown.returncode or found is None:
        raise EngineError(f"{program} -version fails ({shown.stderr.strip()[:200]}): {way_out}")
    if int(found[1]) < LEAST_JAVA:
        raise EngineError(f"{program} is Java {found[1]}: {way_out}")


def use_rocksdb(frame: DataFrame) -> None:
    """Have the session of a frame keep state in RocksDB, where it says nothing else.

    Raises
    ------
    EngineError
        If it is set to another state store than RocksDB or the one that Spark begins with.
    """
    conf = frame.sparkSession.conf
    provider = str(conf.get(PROVIDER))
    if "rocksdb" in provider.lower():
        return
    if not provider.endswith(NO_USE):
        raise EngineError(
            f"{PROVIDER} is {provider}: the state of feeds needs RocksDB; set it to {ROCKSDB}"
        )
    conf.set(PROVIDER, ROCKSDB)


def session(
    name: str = "streambasis",
    *,
    master: str | None = None,
    settings: Mapping[str, Any] | None = None,
) -> SparkSession:
    """Return a Spark session made for fleets, or the one there is with these settings.

    Parameters
    ----------
    name : str
        Name of the application.
    master : str, optional
        Where it runs, such as ``"local[2]"``; by default as Spark is configured.
    settings : mapping, optional
        Further settings of Spark, which go before ours.

    Returns
    -------
    pyspark.sql.SparkSession
        With the RocksDB state store, whose changes are written rather than its files, and workers
        whose BLAS runs on one thread.

    Raises
    ------
    EngineError
        If something is missing that Spark needs; see :func:`check_environment`.

    Notes
    -----
    On this machine (a master that begins with ``local``) the workers are also made to use this
    Python and the loopback address, and shuffles to have two partitions for each core: each
    partition of a stream keeps a state store. Their number is fixed when a stream first starts
    (``spark.sql.shuffle.partitions``).
    """
    check_environment(java=True)
    from pyspark.sql import SparkSession

    wanted = dict(SETTINGS)
    if master is not None and master.startswith("local"):
        _stay_here()
        wanted["spark.sql.shuffle.partitions"] = str(PARTITIONS_PER_CORE * (os.cpu_count() or 1))
    builder = SparkSession.builder.appName(name)
    if master is not None:
        builder = builder.master(master)
    for setting, value in {**wanted, **(settings or {})}.items():
        builder = builder.config(setting, value)
    return builder.getOrCreate()


def _stay_here() -> None:
    """Have Spark use this machine's loopback address, this Python and the Spark it comes with."""
    import pyspark

    os.environ.setdefault("PYSPARK_PYTHON", sys.executable)
    os.environ.setdefault("SPARK_LOCAL_IP", "127.0.0.1")
    os.environ.setdefault("SPARK_LOCAL_HOSTNAME", "localhost")
    # a cluster of processes on this machine starts its workers from there
    os.environ.setdefault("SPARK_HOME", os.path.dirname(pyspark.__file__))
