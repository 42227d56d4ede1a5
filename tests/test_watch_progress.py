"""The readings of a run that the report draws: true, evenly spread, bounded."""

from __future__ import annotations

import json
import threading
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest

from streambasis import load
from streambasis.feeds import open_feed
from streambasis.monitor import NoveltyMonitor
from streambasis.watch import progress as progress_module
from streambasis.watch.home import Home
from streambasis.watch.loop import Run
from streambasis.watch.progress import ENERGIES, SPACING, Progress


def samples_of(rows: int, seed: int = 5) -> np.ndarray:
    """Return two sources in ten channels with noise; the first source turns slowly."""
    rng = np.random.default_rng(seed)
    mixing = np.random.default_rng(1).standard_normal((3, 10))
    turn = np.linspace(0.0, 0.6, rows)
    sources = rng.standard_normal((rows, 2))
    moving = [np.cos(turn) * sources[:, 0], np.sin(turn) * sources[:, 0], sources[:, 1]]
    return np.stack(moving, axis=1) @ mixing + 0.3 * rng.standard_normal((rows, 10))


class Silent:
    """Hears a run and says nothing."""

    def opened(self, event: object) -> None:
        """Hear an opening."""

    def closed(self, event: object) -> None:
        """Hear a closing."""

    def adopted(self, event: object) -> None:
        """Hear an adoption."""

    def advance(self, samples: int) -> None:
        """Hear the progress."""


def test_readings_are_those_of_the_monitor() -> None:
    """Each row holds noise floor, drift, adopted directions and energies as they stood then."""
    monitor, progress = NoveltyMonitor(10, baseline=600), Progress({})
    expected = []
    for piece in np.split(samples_of(5 * SPACING), 5):
        monitor.push_many(piece)
        progress.take(monitor)
        expected.append((monitor.count - 1, monitor.noise, monitor.drift, monitor.basis.energies))
    table = progress.table(monitor)
    for row, (sample, noise, drift, energies) in zip(table.to_pylist(), expected, strict=True):
        assert (row["sample"], row["noise"], row["drift"]) == (sample, noise, drift)
        assert row["known"] == 0
        padded = [*energies, *[np.nan] * (ENERGIES - len(energies))]
        np.testing.assert_array_equal(row["energies"], padded)


def test_a_full_table_drops_every_other_reading(monkeypatch: pytest.MonkeyPatch) -> None:
    """However long the run, readings stay below the bound, evenly spread, the newest included."""
    most = 8
    monkeypatch.setattr(progress_module, "MOST_READINGS", most)
    monkeypatch.setattr(progress_module, "SPACING", 64)
    monitor, progress = NoveltyMonitor(10, baseline=60), Progress({})
    for piece in np.split(samples_of(64 * 101), 101):
        monitor.push_many(piece)
        progress.take(monitor)
        assert len(progress.table(monitor)) <= most
    numbers = progress.table(monitor)["sample"].to_numpy()
    assert numbers[-1] == monitor.count - 1
    spacing = np.diff(numbers[:-1])
    assert set(spacing) == {64 * 16}
    assert numbers[-1] - numbers[-2] <= 64 * 16


def test_a_home_keeps_readings_and_the_monitor(tmp_path: Path) -> None:
    """At the end ``progress.arrow`` and ``state.arrow`` hold what the run came to."""
    values = samples_of(3000)
    table = pa.table({f"c{i}": values[:, i] for i in range(10)})
    with pa.ipc.new_file(tmp_path / "feed.arrow", table.schema) as file:
        file.write_table(table)
    feed = open_feed(tmp_path / "feed.arrow")
    monitor = NoveltyMonitor(feed.columns.channels, baseline=1000)
    home = Home(tmp_path / "home")
    Run(feed, monitor, Silent(), home=home, adopt_after=0)(threading.Event())
    home.close()
    kept = pa.ipc.open_file(tmp_path / "home" / "progress.arrow").read_all()
    assert kept["sample"].to_pylist() == [1023, 2047, 2999]
    assert kept["drift"][-1].as_py() == monitor.drift
    about = json.loads(kept.schema.metadata[b"about"])
    assert about["channels"] == [f"c{i}" for i in range(10)]
    assert about["clock"] is None
    again = load(tmp_path / "home" / "state.arrow")
    assert (again.count, again.noise, again.drift) == (3000, monitor.noise, monitor.drift)


def test_before_the_baseline_there_is_nothing_to_read() -> None:
    """A monitor without a basis gives an empty table."""
    monitor, progress = NoveltyMonitor(10, baseline=600), Progress({})
    monitor.push_many(samples_of(500))
    progress.take(monitor)
    assert len(progress.table(monitor)) == 0
