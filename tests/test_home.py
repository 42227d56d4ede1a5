"""A run goes on where it stopped, however it stopped: nothing is lost and nothing comes twice."""

from __future__ import annotations

import json
import multiprocessing
import os
import random
import re
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pytest
from faults import Faults

from streambasis import cli
from streambasis.errors import HomeError
from streambasis.feeds import FeedOptions, open_feed
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import load, read_state, save
from streambasis.watch import home as home_module
from streambasis.watch.home import Home
from streambasis.watch.loop import Run

ROOT = Path(__file__).parent.parent
ROWS = 30_000
KILLS = 20
EVERY = (1024, 1e9)
"""Samples and seconds between commits: one with every batch, so that kills meet many."""


class Deaf:
    """A reporter that stops the run after some batches."""

    def __init__(self, asked: threading.Event, batches: int) -> None:
        self.asked, self.left = asked, batches

    def opened(self, event: Any) -> None:
        """Hear nothing."""

    def closed(self, event: Any) -> None:
        """Hear nothing."""

    def adopted(self, event: Any) -> None:
        """Hear nothing."""

    def warned(self, warning: str) -> None:
        """Hear nothing: none of these feeds gives cause for it."""
        raise AssertionError(warning)

    def advance(self, samples: int) -> None:
        """Count the batches."""
        assert samples > 0
        self.left -= 1
        if self.left == 0:
            self.asked.set()


@pytest.fixture(scope="module")
def feed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a feed with faults that come back, one that stays, and missing values."""
    rng = np.random.default_rng(6)
    values = rng.normal(size=(ROWS, 2)) @ rng.normal(size=(2, 8)) * 3
    values += 0.5 * rng.normal(size=(ROWS, 8))
    for start in range(4000, ROWS, 2500):
        values[start : start + 120, start // 2500 % 8] += 6
    values[22_000:, 7] += 5
    values[rng.random(values.shape) < 0.0005] = np.nan
    table = pa.table({f"c{i}": values[:, i] for i in range(8)})
    path = tmp_path_factory.mktemp("feed") / "feed.arrow"
    with pa.ipc.new_file(path, table.schema) as file:
        file.write_table(table, max_chunksize=5000)
    return path


def run(feed: Path, folder: Path, batches: int = 10**9, *, rows: int = 3000) -> None:
    """Run over the feed, or go on, for some batches at most."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(home_module, "SEGMENT_ROWS", rows)
        asked = threading.Event()
        options = FeedOptions(stop=asked, wait=None)
        with (
            Home(folder) as home,
            open_feed(feed, position=home.position, options=options) as opened,
        ):
            home.begin({"feed": str(feed)})
            monitor = home.monitor() or NoveltyMonitor(
                opened.columns.channels, baseline=1000, false_alarm=1e-3
            )
            reporter = Deaf(asked, batches)
            Run(opened, monitor, reporter, home=home, every=EVERY, adopt_after=1000)(asked)


def results(folder: Path) -> dict[str, bytes]:
    """Return what a run leaves for others, byte for byte."""
    files = [*folder.glob("decisions/*"), folder / "events.jsonl", folder / "progress.arrow"]
    return {str(path.relative_to(folder)): path.read_bytes() for path in files}


@pytest.fixture(scope="module")
def straight(feed: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    """Return the results of a run that was never interrupted."""
    folder = tmp_path_factory.mktemp("straight") / "home"
    run(feed, folder)
    found = results(folder)
    assert len(found) == 12
    assert found["events.jsonl"].count(b"\n") > 5
    return found


def test_a_run_in_parts_equals_a_run_in_one(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """Stopped after every few batches and started again, the results are the same bytes."""
    counts = [0]
    while counts[-1] < ROWS:
        run(feed, tmp_path / "home", 3)
        counts.append(load(tmp_path / "home" / "state.arrow").count)
        assert counts[-1] > counts[-2]
    assert len(counts) > 5
    assert results(tmp_path / "home") == straight


def test_a_finished_run_started_again_changes_nothing(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """Where the feed has nothing new, nothing new is written."""
    for _ in range(2):
        run(feed, tmp_path / "home")
        assert results(tmp_path / "home") == straight


def test_a_killed_run_goes_on_exactly_once(feed: Path, tmp_path: Path) -> None:
    """SIGKILL at random moments of a run: the results are those of a run that was left alone."""
    rng = random.Random(11)
    # the server imports everything once, so that its children are at work at once; every run is a
    # child of it, so that all compute with the same libraries loaded
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload([__name__])
    _finish(context.Process(target=run, args=(feed, tmp_path / "straight")))
    straight = results(tmp_path / "straight")
    killed = 0
    for attempt in range(KILLS):
        folder = tmp_path / f"home{attempt}"
        counts = [0]
        while counts[-1] < ROWS and killed < KILLS:
            child = context.Process(target=run, args=(feed, folder))
            child.start()
            _wait_for_commit(child, folder / "state.arrow", rng)
            child.kill()
            child.join()
            child.close()
            counts.append(read_state(folder / "state.arrow").parts["core"].facts["count"])
            killed += counts[-1] < ROWS
        assert counts == sorted(counts), "a commit was lost"
        _finish(context.Process(target=run, args=(feed, folder)))
        found = results(folder)
        assert {name for name in straight if found.get(name) != straight[name]} == set()
        assert found.keys() == straight.keys()
        assert not list(folder.rglob(".*.partial"))
        if killed == KILLS:
            break
    assert killed == KILLS, "the runs ended before they were killed"


def _finish(child: Any) -> None:
    """Let a run come to its end."""
    child.start()
    child.join()
    assert child.exitcode == 0
    child.close()


def _wait_for_commit(child: Any, state: Path, rng: random.Random) -> None:
    """Wait until the child has committed something, and then for a random moment."""
    before = state.stat().st_mtime_ns if state.exists() else 0
    for _ in range(20_000):
        now = state.stat().st_mtime_ns if state.exists() else 0
        if now != before or child.exitcode is not None:
            break
        child.join(0.002)
    child.join(rng.uniform(0, 0.03))


def test_a_second_process_is_refused_and_told_of_the_first(tmp_path: Path) -> None:
    """The folder belongs to one process at a time; the message names it."""
    script = (
        "import sys, time; from pathlib import Path; from streambasis.watch.home import Home\n"
        "home = Home(Path(sys.argv[1])); print('held', flush=True); time.sleep(60)"
    )
    folder = tmp_path / "home"
    holder = subprocess.Popen(
        [sys.executable, "-c", script, folder], cwd=ROOT, stdout=subprocess.PIPE
    )
    assert holder.stdout is not None
    holder.stdout.readline()
    with pytest.raises(HomeError, match=rf"in use by another streambasis \(process {holder.pid}\)"):
        Home(folder)
    holder.kill()
    holder.wait()
    holder.stdout.close()
    Home(folder).close()


def test_what_was_not_committed_is_written_again(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """Events and decisions beyond the last commit are cut off before the run goes on."""
    folder = tmp_path / "home"
    run(feed, folder, 12)
    with (folder / "events.jsonl").open("a") as events:
        events.write('{"event": 99}\n{"ev')
    (folder / "decisions" / "000000027000.arrow").write_bytes(b"ahead of its time")
    (folder / "decisions" / ".000000003000.arrow.0123456789abcdef.partial").write_bytes(b"")
    run(feed, folder)
    assert results(folder) == straight


@pytest.mark.parametrize("forever", [False, True], ids=["once", "for ever"])
def test_a_commit_that_fails_leaves_the_one_before(
    feed: Path, tmp_path: Path, forever: bool
) -> None:
    """When the n-th operation of a commit fails, for every n, the run stands before or after it."""
    folder = tmp_path / "home"
    run(feed, folder, 6)
    before = read_state(folder / "state.arrow").facts["position"]
    for at in range(1, 1000):
        with Home(folder) as home:
            home.begin({"feed": str(feed)})
            monitor = home.monitor()
            assert monitor is not None
            assert home.state is not None
            home.take_event({"event": at})
            facts = {**home.state.facts, "position": {"at": at}}
            with pytest.MonkeyPatch.context() as patch:
                faults = Faults(patch, at, forever=forever)
                with suppress(HomeError):
                    home.commit(monitor, facts, {"progress": home.state.parts["progress"]})
        state = read_state(folder / "state.arrow")
        assert state.facts["position"] in (before, {"at": at})
        assert state.facts["events_bytes"] <= (folder / "events.jsonl").stat().st_size
        before = state.facts["position"]
        if not faults.met:
            break
    assert at > 5
    assert before == {"at": at}


def test_another_run_is_not_gone_on_with(feed: Path, tmp_path: Path) -> None:
    """Another feed or setting is refused, and what differs is named."""
    folder = tmp_path / "home"
    run(feed, folder, 2)
    before = results(folder) | {"state": (folder / "state.arrow").read_bytes()}
    with Home(folder) as home, pytest.raises(HomeError, match=r"feed = .*feed\.arrow.*other"):
        home.begin({"feed": "other.csv"})
    assert results(folder) | {"state": (folder / "state.arrow").read_bytes()} == before


def test_a_folder_without_its_state_is_refused(feed: Path, tmp_path: Path) -> None:
    """Results whose state is gone, damaged or of something else are never written over."""
    folder = tmp_path / "home"
    run(feed, folder, 8)
    state = folder / "state.arrow"
    good = state.read_bytes()
    state.unlink()
    with pytest.raises(HomeError, match="without its state"):
        Home(folder)
    state.write_bytes(good[:-5])
    with pytest.raises(HomeError, match=re.escape(f"{state}: ")):
        Home(folder)
    save(load_monitor(good, tmp_path), state)
    with pytest.raises(HomeError, match="holds a NoveltyMonitor, not a run"):
        Home(folder)
    state.write_bytes(good)
    os.truncate(folder / "events.jsonl", 0)
    if read_state(state).facts["events_bytes"]:
        with pytest.raises(HomeError, match="shorter"):
            Home(folder)


def load_monitor(data: bytes, folder: Path) -> NoveltyMonitor:
    """Return the monitor in the bytes of a state file."""
    path = folder / "copy.arrow"
    path.write_bytes(data)
    monitor: NoveltyMonitor = load(path)
    return monitor


def test_the_command_goes_on_where_it_stopped(
    feed: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A feed that has grown is read on from its old end, and another setting is an error."""
    table = pa.ipc.open_file(feed).read_all()
    path, whole, folder = (tmp_path / name for name in ("part.csv", "whole.csv", "home"))
    text = "\n".join([",".join(table.column_names), *_rows(table, 0, 3000)]) + "\n"
    path.write_text(text)
    arguments = ["--baseline", "1000", "--false-alarm", "0.001", "--quiet", "--home"]
    assert cli.main(["watch", str(path), *arguments, str(folder)]) == cli.OK
    assert load(folder / "state.arrow").count == 3000
    with path.open("a") as file:
        file.write("\n".join(_rows(table, 3000, 6000)) + "\n")
    assert cli.main(["watch", str(path), *arguments, str(folder)]) == cli.OK
    whole.write_bytes(path.read_bytes())
    assert cli.main(["watch", str(whole), *arguments, str(tmp_path / "other")]) == cli.OK
    samples = []
    for home in (folder, tmp_path / "other"):
        file = pa.ipc.open_file(home / "decisions" / "000000000000.arrow")
        samples.append(file.read_all()["sample"].to_pylist())
    assert samples[0] == samples[1] == list(range(6000))
    capsys.readouterr()
    assert cli.main(["watch", str(path), "--baseline", "500", "--home", str(folder)]) == cli.OUTPUT
    assert "baseline = 1000, not 500" in capsys.readouterr().err


def _rows(table: pa.Table, first: int, last: int) -> Iterator[str]:
    for row in table.slice(first, last - first).to_pylist():
        yield ",".join("" if np.isnan(value) else repr(value) for value in row.values())


def test_the_state_of_a_run_is_a_snapshot_that_others_read(feed: Path, tmp_path: Path) -> None:
    """state.arrow loads as the monitor, and says how far the feed was read."""
    folder = tmp_path / "home"
    run(feed, folder, 5)
    assert load(folder / "state.arrow").count == 5 * 1024
    facts = read_state(folder / "state.arrow").facts
    assert facts["position"]["sample"] == 5 * 1024
    assert json.dumps(facts)
