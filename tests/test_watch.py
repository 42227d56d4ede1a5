"""The daemon: what it keeps, what it shows, when it adopts, how it stops."""

from __future__ import annotations

import io
import json
import threading
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pytest

from streambasis import cli
from streambasis.feeds import BATCH_ROWS, open_feed
from streambasis.monitor import Event, NoveltyMonitor
from streambasis.watch import home as home_module
from streambasis.watch.home import Home
from streambasis.watch.loop import Run
from streambasis.watch.reporting import Summary
from streambasis.watch.terminal import Terminal, carriers, summary_lines, when
from tests.promises import DECISION_COLUMNS, EVENT_KEYS

SHIPPED = Path(__file__).parent.parent / "examples" / "pump_station.csv"


class Listener:
    """Writes down what a run reports."""

    def __init__(self) -> None:
        self.heard: list[tuple[str, int]] = []

    def opened(self, event: Event) -> None:
        """Write down an opening."""
        self.heard.append(("opened", event["event"]))

    def closed(self, event: Event) -> None:
        """Write down a closing."""
        self.heard.append(("closed", event["event"]))

    def adopted(self, event: Event) -> None:
        """Write down an adoption."""
        self.heard.append(("adopted", event["event"]))

    def advance(self, samples: int) -> None:
        """Write down the progress."""
        self.samples = samples


def read_decisions(folder: Path) -> pa.Table:
    """Return the decisions of all segments in the order of their names."""
    tables = [pa.ipc.open_file(path).read_all() for path in sorted(folder.glob("*.arrow"))]
    return pa.concat_tables(tables)


@pytest.fixture(scope="module")
def kept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the home of a run over the shipped feed, kept in small segments."""
    path = tmp_path_factory.mktemp("run") / "home"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(home_module, "SEGMENT_ROWS", 3000)
        assert cli.main(["watch", str(SHIPPED), "--home", str(path), "--quiet"]) == cli.OK
    return path


def test_home_holds_a_decision_for_every_sample(kept: Path) -> None:
    """All samples in order, each once, over segments named by their first sample."""
    decisions = read_decisions(kept / "decisions")
    assert {f.name: f.type for f in decisions.schema} == DECISION_COLUMNS
    np.testing.assert_array_equal(np.arange(20_000), decisions["sample"])
    names = [path.name for path in sorted((kept / "decisions").iterdir())]
    assert names == [f"{first:012d}.arrow" for first in range(0, 20_000, 3000)]


def test_home_holds_every_event_with_exactly_the_promised_keys(kept: Path) -> None:
    """Events are numbered, in order, with the keys of the format, and agree with the decisions."""
    events = [json.loads(line) for line in (kept / "events.jsonl").read_text().splitlines()]
    assert [list(event) for event in events] == [EVENT_KEYS] * len(events)
    decisions = read_decisions(kept / "decisions")
    marked = decisions["event"].to_numpy(zero_copy_only=False)
    times = decisions["time"].to_numpy().astype("datetime64[ms]")
    for event in events:
        inside = np.flatnonzero(marked == event["event"])
        assert inside.size
        assert event["start"] <= inside[0]
        assert np.datetime64(event["start_time"].rstrip("Z")) == times[event["start"]]
        assert abs(sum(event["contributions"].values()) - 1.0) < 1e-6
        assert set(event["channels"]) <= set(event["contributions"])


def test_a_run_without_home_leaves_no_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Only ``--home`` writes anything."""
    monkeypatch.chdir(tmp_path)
    assert cli.main(["watch", str(SHIPPED), "--quiet"]) == cli.OK
    assert list(tmp_path.iterdir()) == []


def shifted_feed(folder: Path, rows: int, shift_at: int) -> Path:
    """Write three sources in twelve channels whose level changes for good at a row."""
    rng = np.random.default_rng(3)
    values = rng.standard_normal((rows, 3)) @ rng.standard_normal((3, 12))
    values += 0.3 * rng.standard_normal(values.shape)
    values[shift_at:, [2, 7, 9]] += [3.0, -4.0, 3.5]
    table = pa.table({f"c{i}": values[:, i] for i in range(12)})
    path = folder / "feed.arrow"
    with pa.ipc.new_file(path, table.schema) as file:
        file.write_table(table)
    return path


def run_over(path: Path, adopt_after: int) -> tuple[Listener, Summary, NoveltyMonitor]:
    """Run a monitor over a file and return what was heard."""
    feed = open_feed(path)
    monitor = NoveltyMonitor(feed.columns.channels, baseline=1000)
    listener = Listener()
    summary = Run(feed, monitor, listener, adopt_after=adopt_after)(threading.Event())
    return listener, summary, monitor


def test_a_change_that_lasts_is_one_event_and_then_known(tmp_path: Path) -> None:
    """After ``adopt_after`` samples the open event is adopted, closes, and silence follows."""
    listener, summary, monitor = run_over(shifted_feed(tmp_path, 9000, 4000), 700)
    assert listener.heard == [("opened", 0), ("adopted", 0), ("closed", 0)]
    event = monitor.events[0]
    assert 4000 <= event["start"] <= 4010
    assert event["end"] <= event["start"] + max(700, BATCH_ROWS)
    assert (summary.events, summary.adopted, summary.samples) == (1, 1, 9000)


def test_without_adoption_the_event_stays_open_to_the_end(tmp_path: Path) -> None:
    """``adopt_after=0`` never adopts; the end of the feed closes the event."""
    listener, summary, monitor = run_over(shifted_feed(tmp_path, 6000, 4000), 0)
    assert listener.heard == [("opened", 0), ("closed", 0)]
    assert monitor.events[0]["end"] == 5999
    assert summary.adopted == 0


def test_an_event_inside_another_is_told_when_it_closes(tmp_path: Path) -> None:
    """A fault during a change of level opens and closes while the change goes on."""
    path = shifted_feed(tmp_path, 6000, 3000)
    table = pa.ipc.open_file(path).read_all()
    values = table["c5"].to_numpy().copy()
    values[4500:4600] += 5.0
    with pa.ipc.new_file(path, table.schema) as file:
        file.write_table(table.set_column(5, "c5", pa.array(values)))
    listener, summary, monitor = run_over(path, 0)
    assert listener.heard == [("opened", 0), ("opened", 1), ("closed", 1), ("closed", 0)]
    assert monitor.events[1]["channels"] == ["c5"]
    assert summary.events == 2


def test_a_wish_to_stop_is_heard_after_the_batch(tmp_path: Path) -> None:
    """A run asked to stop ends after the batch in hand, with its results whole."""
    feed = open_feed(shifted_feed(tmp_path, 6000, 4000))
    monitor = NoveltyMonitor(feed.columns.channels, baseline=500)
    asked = threading.Event()
    asked.set()
    summary = Run(feed, monitor, Listener(), adopt_after=0)(asked)
    assert summary.samples == BATCH_ROWS


def test_a_run_stopped_within_the_baseline_ends_well(tmp_path: Path) -> None:
    """Stopped before anything could be judged, a run still keeps and tells what there is."""
    feed = open_feed(shifted_feed(tmp_path, 6000, 4000))
    monitor = NoveltyMonitor(feed.columns.channels, baseline=2000)
    asked = threading.Event()
    asked.set()
    home = Home(tmp_path / "home")
    summary = Run(feed, monitor, Listener(), home=home, adopt_after=0)(asked)
    home.close()
    assert (summary.samples, summary.rank, summary.events) == (BATCH_ROWS, 0, 0)
    assert len(read_decisions(tmp_path / "home" / "decisions")) == BATCH_ROWS


def event_of(**changes: Any) -> Event:
    """Return a closed event with some fields changed."""
    fields: dict[str, Any] = {
        "event": 3, "start": 10, "end": 20, "start_time": "2026-03-02T00:00:10", "end_time": None,
        "peak": 2.5, "channels": ["a", "b"], "contributions": {"a": 0.7, "b": 0.25, "c": 0.05},
        "repeats": None, "cosine": None, "label": None,
    }  # fmt: skip
    return Event({**fields, **changes}, np.eye(1, 3), open=False)


def test_lines_name_time_sample_and_channels() -> None:
    """The parts of a line: when, with or without a time, and who, with or without shares."""
    event = event_of(start_time="2026-03-02T00:00:10.000000000")
    assert when(event_of(start_time="2026-03-02T00:00:10.250000000"), "start") == (
        "2026-03-02T00:00:10.25  sample 10"
    )
    assert when(event, "start") == "2026-03-02T00:00:10  sample 10"
    assert when(event, "end") == "sample 20"
    assert carriers(event, shares=True) == "a 70 %, b 25 %"
    many = event_of(channels=list("abcdef"), contributions=dict.fromkeys("abcdef", 1 / 6))
    assert carriers(many, shares=False) == "a, b, c, d and 2 more"


def test_a_warning_is_one_line_whatever_it_holds() -> None:
    """What came from outside neither breaks the line nor moves the cursor; quiet or not."""
    out, err = io.StringIO(), io.StringIO()
    terminal = Terminal(out, err, as_json=False, quiet=True)
    terminal.warned("row 3: 'a\nb\x1b[2J'")
    terminal.noted("good to know")
    assert (out.getvalue(), err.getvalue()) == ("", "streambasis: row 3: 'a\\nb\\x1b[2J'\n")
    terminal.quiet = False
    terminal.noted("good to know")
    assert err.getvalue().endswith("streambasis: good to know\n")


def test_summary_says_all_that_was_promised() -> None:
    """Samples, rank, noise floor, events, samples per second and orthogonality defect."""
    summary = Summary(20_000, 0, 200_000 * 10**9, 5, 1.02, 0.21, 5, 1, 1, 0.5, 0.07)
    lines = summary_lines(summary)
    assert lines[1:] == [
        "samples        20,000 over 2.31 days",
        "rank           5 directions",
        "noise floor    1.02 (variance per residual dimension, scaled channels)",
        "drift          0.21 rad since the baseline",
        "events         5, 1 of them repeating an earlier one, 1 adopted as known behaviour",
        "speed          40,000 samples per second",
        "orthogonality  defect 0.07 (sound below 3)",
    ]
    again = summary_lines(replace(summary, samples=500, before=19_500))
    assert again[1] == "samples        20,000 over 2.31 days, 500 of them since it went on"
