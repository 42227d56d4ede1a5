"""A small cluster of Spark's on this machine, whose processes can be found and killed."""

from __future__ import annotations

import os
import shutil
import signal
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("pyspark", reason="pyspark is not installed: pip install 'streambasis[spark]'")

from streambasis.fleet import spark

MASTER = "local-cluster[2,1,1024]"
EXECUTOR = "CoarseGrainedExecutorBackend"
PYTHON = "pyspark.daemon"
SETTINGS = {
    "spark.ui.enabled": "false",
    "spark.ui.showConsoleProgress": "false",
    "spark.log.level": "ERROR",
    "spark.sql.shuffle.partitions": "2",
    # summer time begins and ends in this zone: times must not notice
    "spark.sql.session.timeZone": "Europe/Berlin",
    "spark.driver.memory": "1g",
    # what a killed worker had is looked for there in vain: not for long
    "spark.shuffle.io.maxRetries": "1",
    "spark.shuffle.io.retryWait": "1s",
    "spark.locality.wait": "0s",
}
PATIENCE = 120.0


def need_java() -> None:
    """Skip a test where no Java is installed (a failure in ``.ci/run``)."""
    home = os.environ.get("JAVA_HOME")
    if shutil.which("java", path=os.path.join(home, "bin") if home else None) is None:
        pytest.skip("Java is not installed: apt-get install openjdk-17-jre-headless")


def descendants(ancestor: int) -> dict[int, str]:
    """Return the processes that an own process has started, directly or not, by their command."""
    parents: dict[int, int] = {}
    commands: dict[int, str] = {}
    for folder in Path("/proc").iterdir():
        if folder.name.isdigit():
            try:
                status = (folder / "stat").read_text()
                command = (folder / "cmdline").read_bytes()
            except OSError:
                continue  # it has ended meanwhile
            pid = int(folder.name)
            parents[pid] = int(status.rpartition(")")[2].split()[1])
            commands[pid] = command.replace(b"\0", b" ").decode(errors="replace")
    found: set[int] = {ancestor}
    while more := {pid for pid, parent in parents.items() if parent in found} - found:
        found |= more
    return {pid: commands[pid] for pid in found - {ancestor} if pid in commands}


@contextmanager
def cluster(**settings: str) -> Iterator[Any]:
    """Start a driver here and two worker processes; end them, whatever happened."""
    from pyspark import SparkContext

    session = spark.session("streambasis tests", master=MASTER, settings={**SETTINGS, **settings})
    try:
        yield session
    finally:
        ours = descendants(os.getpid())
        mine = {pid for pid, command in ours.items() if "java" in command or PYTHON in command}
        session.stop()
        gateway = SparkContext._gateway
        gateway.shutdown()
        gateway.proc.stdin.close()
        gateway.proc.wait(PATIENCE)
        SparkContext._gateway = SparkContext._jvm = None
        for pid in mine:
            try:
                os.kill(pid, signal.SIGKILL)
            except ProcessLookupError:
                continue  # as it should be


def kill_at_work(session: Any, what: str) -> int:
    """Wait until tasks run, kill a process of the cluster, and return its number."""
    tracker = session.sparkContext.statusTracker()
    end = time.monotonic() + PATIENCE
    while time.monotonic() < end:
        stages = [tracker.getStageInfo(stage) for stage in tracker.getActiveStageIds()]
        if any(stage is not None and stage.numActiveTasks for stage in stages):
            victims = [p for p, command in descendants(os.getpid()).items() if what in command]
            if victims:
                os.kill(victims[-1], signal.SIGKILL)
                return victims[-1]
        time.sleep(0.01)
    raise AssertionError(f"no {what} was seen at work")
