"""``streambasis watch --key``: many feeds in one source, through kills and restarts."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
import pytest

from streambasis import NoveltyMonitor
from streambasis.commands import run
from streambasis.feeds import FeedOptions, Keys, open_feed
from tests.fleets import NAMES, fleet_of, mixed, of_key

KEYS = ["north", "south", "7"]
SETTINGS = ["--key", "pump", "--baseline", "64", "--half-life", "520", "--adopt-after", "150"]
SAMPLES = 1500


def whole() -> pa.Table:
    """Return rows of all feeds with a time, a lasting change in one of them."""
    feeds = fleet_of(KEYS, SAMPLES)
    feeds["south"][900:, 4] += 6.0
    table = mixed(feeds, [], np.random.default_rng(0))[0]
    return table.append_column("time", pa.array(1e9 + np.arange(len(table))))


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with the same rows in three formats."""
    folder = tmp_path_factory.mktemp("source")
    table = whole()
    pa.csv.write_csv(table, folder / "rows.csv")
    pa.parquet.write_table(table, folder / "rows.parquet")
    with (folder / "rows.jsonl").open("w") as lines:
        for row in table.to_pylist():
            row = {k: None if isinstance(v, float) and np.isnan(v) else v for k, v in row.items()}
            lines.write(json.dumps(row) + "\n")
    return folder


def decisions(home: Path) -> pa.Table:
    """Return all decisions that a home holds."""
    files = sorted((home / "decisions").iterdir())
    return pa.concat_tables([pa.ipc.open_file(file.read_bytes()).read_all() for file in files])


@pytest.fixture(scope="module")
def expected(source: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the home of a run that nothing disturbed."""
    home = tmp_path_factory.mktemp("expected") / "home"
    assert run(["watch", str(source / "rows.csv"), *SETTINGS, "--home", str(home), "--quiet"]) == 0
    return home


@pytest.mark.parametrize("name", ["rows.csv", "rows.jsonl", "rows.parquet"])
def test_keys_are_read_from_any_format(name: str, source: Path) -> None:
    """The last number of a row is that of its key, and the rows are the same in every format."""
    keys = Keys("pump")
    with open_feed(source / name, options=FeedOptions(keys=keys)) as feed:
        assert feed.columns.channels == NAMES
        values = np.concatenate([batch.values for batch in feed.batches()])
    table = whole()
    assert [keys.names[int(code)] for code in values[:, -1]] == table["pump"].to_pylist()
    assert np.array_equal(values[:, 1], table["pressure"].to_numpy(), equal_nan=True)


def test_a_row_without_a_key_is_malformed(tmp_path: Path) -> None:
    """It is passed over and told, and the rows around it are taken."""
    file = tmp_path / "rows.csv"
    file.write_text("pump,a,b\nnorth,1,2\n,3,4\nsouth,5,6\n")
    options = FeedOptions(keys=Keys("pump"), strict=False)
    with open_feed(file, options=options) as feed:
        (batch,) = feed.batches()
    assert batch.values.tolist() == [[1, 2, 0], [5, 6, 1]]
    assert [(row.number, "no key" in row.reason) for row in batch.malformed] == [(3, True)]


def test_each_key_is_judged_by_a_monitor_of_its_own(expected: Path) -> None:
    """Decisions are those of a monitor for each key; a lasting change is adopted at its sample."""
    found, table = decisions(expected), whole()
    assert found.column_names[0] == "pump"
    assert found["pump"].to_pylist() == table["pump"].to_pylist()
    for key in ("north", "7"):
        rows = table.filter(pa.compute.equal(table["pump"], key))
        alone = NoveltyMonitor(NAMES, baseline=64, half_life=520.0)
        times = (rows["time"].to_numpy() * 1e9).astype("datetime64[ns]")
        own = alone.push_many(rows.select(NAMES), at=times)
        assert of_key([found], key).equals(own.combine_chunks())
    events = [json.loads(line) for line in (expected / "events.jsonl").read_text().splitlines()]
    lasting = [e for e in events if e["pump"] == "south" and e["start"] in range(895, 910)]
    assert len(lasting) == 1
    south = of_key([found], "south")["event"].to_pylist()
    assert south[lasting[0]["start"] + 149] == lasting[0]["event"]
    assert south[lasting[0]["start"] + 150] is None


def test_events_name_their_feed(source: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Lines for reading begin with the key, JSON lines have it first, the summary counts feeds."""
    file = str(source / "rows.parquet")
    assert run(["watch", file, *SETTINGS]) == 0
    shown = capsys.readouterr().out
    assert "north  event 0 opened" in shown
    assert "feeds          3" in shown
    assert run(["watch", file, *SETTINGS, "--json"]) == 0
    first = json.loads(capsys.readouterr().out.splitlines()[0])
    assert next(iter(first)) == "pump"


def test_other_settings_are_refused(expected: Path, source: Path, capsys: Any) -> None:
    """A home goes on with the same settings only."""
    other = [*SETTINGS, "--false-alarm", "0.01", "--home", str(expected)]
    assert run(["watch", str(source / "rows.csv"), *other]) != 0
    assert "false_alarm" in capsys.readouterr().err


@pytest.mark.parametrize("command", [["show"], ["report", "--png", "pictures"]])
def test_commands_for_one_feed_say_so(expected: Path, command: list[str], capsys: Any) -> None:
    """``show`` and ``report`` refuse a home of many feeds by saying that it is one."""
    assert run([*command, str(expected)]) != 0
    assert "holds many feeds (--key)" in capsys.readouterr().err


def test_kills_change_nothing(expected: Path, source: Path, tmp_path: Path) -> None:
    """Killed again and again at any moment, the run ends with the files of one left alone."""
    home = tmp_path / "home"
    command = [sys.executable, "-m", "streambasis", "watch", str(source / "rows.csv"), *SETTINGS,
               "--home", str(home), "--quiet", "--snapshot-every", "700"]  # fmt: skip
    chance = random.Random(1)
    index, kills = home / "fleet.arrow", 0
    for _ in range(2):
        process = subprocess.Popen(command)
        seen = index.stat().st_mtime_ns if index.exists() else 0
        while process.poll() is None:
            if index.exists() and index.stat().st_mtime_ns != seen:
                time.sleep(chance.uniform(0.0, 0.02))
                process.send_signal(signal.SIGKILL)
                break
            time.sleep(0.001)
        if process.wait() == 0:
            break
        kills += 1
    else:
        subprocess.run(command, check=True)
    assert kills >= 2
    assert decisions(home).equals(decisions(expected))
    assert (home / "events.jsonl").read_bytes() == (expected / "events.jsonl").read_bytes()
    assert sorted(os.listdir(home)) == sorted(os.listdir(expected))
