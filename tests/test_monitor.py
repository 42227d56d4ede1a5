"""NoveltyMonitor: verdicts, events, recurrence, adoption, gaps, and what survives a restart."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pyarrow as pa
import pytest
from numpy.typing import NDArray

from streambasis import NoveltyMonitor, from_bytes, to_bytes
from streambasis.errors import SampleError, SettingError
from tests.promises import DECISION_COLUMNS, EVENT_KEYS

NAMES = [f"c{i}" for i in range(12)]
BASELINE = 1000


def units(seed: int) -> NDArray[np.float64]:
    """Return the size of the noise of each channel, in its own unit."""
    return 10.0 ** np.random.default_rng([seed, 1]).uniform(-2, 3, 12)


def plant(seed: int, samples: int, *, sources: int = 3) -> NDArray[np.float64]:
    """Return an ordinary feed: sources shared by twelve channels in different units, and noise."""
    rng = np.random.default_rng(seed)
    loads = 2.0 * rng.normal(size=(sources, 12))
    feed = rng.normal(size=(samples, sources)) @ loads + rng.normal(size=(samples, 12))
    return (50.0 + feed) * units(seed)


def with_faults() -> NDArray[np.float64]:
    """Return a feed of seed 7 with a fault on c2 and c9, one on c5, and the first again."""
    feed = plant(7, 4000)
    for start, stop, channels in ((1500, 1600, (2, 9)), (2100, 2180, (5,)), (2900, 3000, (2, 9))):
        for channel in channels:
            feed[start:stop, channel] += 8.0 * units(7)[channel]
    return feed


def run(feed: NDArray[np.float64], sizes: list[int], **settings: Any) -> tuple[Any, pa.Table]:
    """Push a feed in batches of the sizes given, over and over; return monitor and table."""
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE, **settings)
    tables = []
    start = turn = 0
    while start < len(feed):
        size = sizes[turn % len(sizes)]
        tables.append(monitor.push_many(feed[start : start + size]))
        start, turn = start + size, turn + 1
    return monitor, pa.concat_tables(tables)


def test_columns_are_those_of_the_design() -> None:
    """A batch answers with the decision columns, in order and of their types; unknown is null."""
    feed = plant(0, BASELINE + 10)
    _, table = run(feed, [BASELINE + 10])
    assert dict(zip(table.schema.names, table.schema.types, strict=True)) == DECISION_COLUMNS
    assert table["spe"].null_count == table["limit"].null_count == BASELINE
    assert table["time"].null_count == table["event"].null_count == BASELINE + 10


def test_events_name_start_channels_and_repetition() -> None:
    """Faults become events at their first sample, carried by their channels; a return is named."""
    monitor, table = run(with_faults(), [4000])
    events = monitor.events
    assert [list(e) for e in events] == [EVENT_KEYS] * 3
    starts, ends = [e["start"] for e in events], [e["end"] for e in events]
    assert starts == pytest.approx([1500, 2100, 2900], abs=2)
    assert ends == pytest.approx([1599, 2179, 2999], abs=2)
    assert [sorted(e["channels"]) for e in events] == [["c2", "c9"], ["c5"], ["c2", "c9"]]
    assert [e["repeats"] for e in events] == [None, None, 0]
    assert events[2]["cosine"] > 0.95
    assert events[0].duration == ends[0] - starts[0] + 1
    assert sum(events[0]["contributions"].values()) == pytest.approx(1.0)
    assert json.loads(json.dumps(events)) == events
    inside = np.flatnonzero(~np.isnan(table["event"].to_numpy()))
    assert 1500 <= inside[0] < 1508


@pytest.mark.parametrize("sizes", [[1], [7, 300, 1], [255, 256, 257]])
def test_batches_decide_like_singles_to_the_last_bit(sizes: list[int]) -> None:
    """However the feed is cut into batches, every column and every event is the same."""
    feed = with_faults()
    feed[1700:1720, 4] = np.nan
    feed[1540:1545, 2] = np.nan
    feed[1800] = np.nan
    whole, expected = run(feed, [4000], half_life=1500.0)
    parts, actual = run(feed, sizes, half_life=1500.0)
    assert actual.combine_chunks().equals(expected.combine_chunks())
    assert parts.events == whole.events


def test_push_gives_the_row_of_push_many() -> None:
    """A verdict holds what the row of the table holds."""
    feed = with_faults()[:1700]
    table = NoveltyMonitor(NAMES, baseline=BASELINE).push_many(feed)
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    monitor.push_many(feed[:1490])
    for i in range(1490, 1700):
        verdict = monitor.push(feed[i], at=float(i))
        row = table.slice(i, 1).to_pylist()[0]
        assert verdict._asdict() | row == verdict._asdict() | {"time": None}
        assert verdict.time == i * 10**9


@pytest.mark.parametrize("stop", [300, 1000, 1550, 1650, 2950])
def test_restart_is_invisible(stop: int) -> None:
    """A snapshot taken anywhere goes on bit for bit: baseline, open event, recurrence."""
    feed = with_faults()
    whole, expected = run(feed, [4000], half_life=1500.0)
    before = NoveltyMonitor(NAMES, baseline=BASELINE, half_life=1500.0)
    first = before.push_many(feed[:stop])
    after = from_bytes(to_bytes(before))
    second = after.push_many(feed[stop:])
    assert pa.concat_tables([first, second]).combine_chunks().equals(expected.combine_chunks())
    assert after.events == whole.events


def test_change_that_stays_is_one_event_and_silent_once_adopted() -> None:
    """A lasting shift is one open event; after adopt it is explained, and samples say so."""
    feed = plant(7, 5000)
    feed[2000:, [1, 6, 8]] += np.array([9.0, -7.0, 8.0]) * units(7)[[1, 6, 8]]
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    before = monitor.push_many(feed[:3000])
    assert len(monitor.events) == 1
    assert monitor.events[0].open
    assert before["novel"].to_numpy()[2000:3000].mean() > 0.95
    monitor.label(0, "summer mode")
    monitor.adopt(0)
    after = monitor.push_many(feed[3000:])
    assert after["novel"].to_numpy().mean() < 0.005
    assert len(monitor.events) == 1
    assert monitor.events[0]["label"] == "summer mode"
    assert not monitor.events[0].open
    assert monitor.known.rank == len(monitor.adopted)
    assert monitor.push(feed[-1]).known == (0,)
    assert monitor.push(feed[1500]).known == ()
    amounts = monitor.loadings(feed[[1500, 4000]])[:, 0]
    assert abs(amounts[0]) < 5.0 < abs(amounts[1])


@pytest.mark.parametrize("growth", [1.6, 2.0, 4.0])
def test_noise_that_grows_everywhere_is_one_event(growth: float) -> None:
    """A regime in which all channels are noisier, along no direction of its own, is one event."""
    rng = np.random.default_rng(21)
    feed = plant(20, 5000)
    feed[2000:4000] += np.sqrt(growth**2 - 1.0) * rng.normal(size=(2000, 12)) * units(20)
    monitor, _ = run(feed, [5000])
    assert len(monitor.events) == 1
    event = monitor.events[0]
    assert 2000 <= event["start"] < 2300
    assert 3900 < event["end"] < 4100


def test_fault_on_top_of_a_lasting_change_is_its_own_event() -> None:
    """While one event stands, another fault is found, and a repetition of an earlier one known."""
    feed = with_faults()
    feed[2400:, [0, 3]] += 9.0 * units(7)[[0, 3]]
    monitor, _ = run(feed, [4000])
    monitor.finish()
    found = [(e["start"], e["end"], e["repeats"]) for e in monitor.events]
    assert found[2:] == [(2400, 3999, None), (2900, 2999, 0)]


def test_missing_channel_is_projected_out() -> None:
    """A missing channel leaves the rest judged; too few observed gives no verdict, not a guess."""
    feed = plant(3, 2200)
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    monitor.push_many(feed[:2000])
    gappy = feed[2000:2200].copy()
    gappy[:, 3] = np.nan
    verdicts = [monitor.push(row) for row in gappy]
    assert {v.missing for v in verdicts} == {("c3",)}
    assert np.mean([v.novel for v in verdicts]) < 0.02
    assert all(v.judged for v in verdicts)
    gappy[0, 3:] = np.nan
    lost = monitor.push(gappy[0])
    assert not lost.judged
    assert np.isnan(lost.spe)
    assert not lost.novel
    assert len(lost.missing) == 9


def test_constant_channel_is_named_and_novel_when_it_moves() -> None:
    """A channel that never moved is named; its first movement, however small, is novel."""
    feed = plant(4, 2000)
    feed[:, 2] = 3.25
    feed[:, 7] = 0.0
    monitor, _ = run(feed, [2000])
    assert monitor.constant == ("c2", "c7")
    for channel in (2, 7):
        moved = feed[-1].copy()
        moved[channel] += 1e-6
        assert monitor.push(moved).novel
        assert next(iter(monitor.contributions(moved))) == NAMES[channel]


def test_refused_sample_changes_nothing() -> None:
    """A batch with an infinite value is refused by name, and the monitor stays as it was."""
    feed = plant(5, 1500)
    monitor, _ = run(feed, [1500])
    before = to_bytes(monitor)
    bad = feed[:3].copy()
    bad[1, 4] = np.inf
    with pytest.raises(SampleError, match="sample 1501, channel 'c4': value inf"):
        monitor.push_many(bad)
    assert to_bytes(monitor) == before


def test_label_is_named_by_recurrences() -> None:
    """A recurrence carries the label of the event it repeats; its own label goes first."""
    feed = with_faults()
    monitor, _ = run(feed[:2800], [2800])
    monitor.label(0, "loose coupling")
    monitor.push_many(feed[2800:])
    assert [e["label"] for e in monitor.events] == ["loose coupling", None, "loose coupling"]
    monitor.label(2, "loose coupling again")
    assert monitor.events[2]["label"] == "loose coupling again"
    with pytest.raises(SettingError, match="event 9"):
        monitor.label(9, "none")


def test_slow_drift_is_followed_without_an_event() -> None:
    """A subspace that turns and a level that rises are followed by forgetting, and the angle told.

    Without forgetting the same feed ends in an event.
    """
    rng = np.random.default_rng(12)
    samples, sources = 20_000, rng.normal(size=(20_000, 2))
    loads = 2.0 * np.linalg.qr(rng.normal(size=(12, 3)))[0].T * np.sqrt(12)
    turn = np.linspace(0.0, 0.6, samples)[:, None]
    feed = sources[:, :1] * (np.cos(turn) * loads[0] + np.sin(turn) * loads[1])
    feed += sources[:, 1:] * loads[2] + rng.normal(size=(samples, 12))
    feed[:, 4] += np.linspace(0.0, 15.0, samples)
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE, half_life=1000.0)
    table = monitor.push_many(feed)
    assert monitor.events == []
    assert monitor.rank == 2
    assert table["novel"].to_numpy().mean() < 1e-3
    assert monitor.drift == pytest.approx(0.6, abs=0.1)
    # what is left of a ramp is as old as the memory, 1,000 / log 2 samples
    channel, far = next(iter(monitor.moved.items()))
    assert channel == "c4"
    assert far == pytest.approx(15.0 * (1.0 - 1443 / 20_000), rel=0.1)
    assert from_bytes(to_bytes(monitor)).moved == monitor.moved
    still = NoveltyMonitor(NAMES, baseline=BASELINE)
    still.push_many(feed)
    assert still.events != []


def test_frozen_channel_is_an_event() -> None:
    """A channel that repeats its last value is named and an event, though its noise is its own."""
    feed = plant(13, 4000)
    feed[:, 5] = np.random.default_rng(14).normal(size=4000)
    feed[2000:2300, 5] = feed[2000, 5]
    feed[3000:3300, 5] = feed[3000, 5]
    monitor, _ = run(feed[:2200], [2200])
    assert monitor.frozen == ("c5",)
    monitor.push_many(feed[2200:])
    assert monitor.frozen == ()
    first, second = monitor.events
    assert first["channels"] == second["channels"] == ["c5"]
    assert 2000 < first["start"] < 2050
    assert first["end"] == 2299
    assert second["repeats"] == 0


def test_baseline_may_be_given() -> None:
    """With the samples of a file as the baseline, the first sample of the feed is judged."""
    feed = plant(15, 3000)
    monitor = NoveltyMonitor(NAMES, baseline=pa.table(dict(zip(NAMES, feed[:1000].T, strict=True))))
    assert monitor.baseline_done
    assert monitor.baseline == 1000
    counted, expected = run(feed, [3000])
    table = monitor.push_many(feed[1000:])
    assert table["sample"].to_pylist() == list(range(2000))
    assert table["spe"].to_pylist() == expected["spe"].to_pylist()[1000:]
    assert monitor.scale.tolist() == counted.scale.tolist()


def test_fresh_monitor_keeps_what_was_learnt() -> None:
    """A snapshot serves as the baseline of another run: learnt and adopted stay, events go."""
    feed = with_faults()
    monitor, _ = run(feed[:2050], [2050])
    monitor.adopt(0)
    fresh = from_bytes(to_bytes(monitor)).fresh()
    assert (fresh.count, fresh.events, fresh.baseline_done) == (0, [], True)
    table = fresh.push_many(feed[2100:3100])
    assert table["limit"][0].as_py() == monitor.push(feed[2050]).limit
    assert [e["channels"] for e in fresh.events] == [["c5"]]
    assert fresh.push(feed[2950]).known == (0,)
    with pytest.raises(SampleError, match="baseline is not complete: 0 of 1000"):
        NoveltyMonitor(NAMES, baseline=1000).fresh()


@pytest.mark.parametrize("limits", ["tail", "box", "jackson-mudholkar"])
def test_every_limit_finds_faults_and_few_false_ones(limits: str) -> None:
    """On normal noise all three methods find the three faults and alarm seldom."""
    monitor, table = run(with_faults(), [4000], limits=limits, false_alarm=1e-3)
    assert len(monitor.events) == 3
    ordinary = np.r_[1000:1500, 1700:2100, 2300:2900, 3100:4000]
    assert table["novel"].to_numpy()[ordinary].mean() < 4e-3


def test_known_directions_of_unusual_size_are_extreme() -> None:
    """A sample far out along the basis is extreme and not novel, and opens no event."""
    feed = plant(16, 2000)
    monitor, table = run(feed, [2000], false_alarm=1e-3)
    assert table["extreme"].to_numpy()[BASELINE:].mean() < 4e-3
    inside = monitor.basis.mean + 50.0 * monitor.basis.vectors[0] * 5.0
    verdict = monitor.push(inside)
    assert verdict.extreme
    assert not verdict.novel


def test_finish_closes_what_is_open() -> None:
    """At the end of a feed an open event is closed where it was seen last."""
    feed = with_faults()[:1550]
    monitor, _ = run(feed, [1550])
    assert monitor.events[0].open
    monitor.finish()
    assert not monitor.events[0].open
    assert monitor.events[0]["end"] == 1549


def test_times_are_kept() -> None:
    """Times come back in the table, as text in the events, and as nanoseconds in a verdict."""
    feed = with_faults()[:1800]
    times = np.datetime64("2031-05-01T00:00:00", "ms") + 100 * np.arange(1800)
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    table = monitor.push_many(feed, at=times)
    assert table["time"].to_numpy().tolist() == times.astype("datetime64[ns]").tolist()
    start = np.datetime64(monitor.events[0]["start_time"])
    assert start == times[monitor.events[0]["start"]]
    assert monitor.push(feed[0], at=2.5).time == 2_500_000_000


@pytest.mark.parametrize("channels", [1, 2, 3])
def test_few_channels_are_watched(channels: int) -> None:
    """One or two channels share nothing: their noise alone is watched, with rank 0."""
    rng = np.random.default_rng(17)
    feed = rng.normal(size=(4000, channels))
    feed[3000:3100, 0] += 12.0
    monitor = NoveltyMonitor(channels, baseline=BASELINE)
    table = monitor.push_many(feed)
    assert monitor.rank == 0
    assert table["novel"].to_numpy()[:3000].mean() < 2e-3
    assert [(e["start"], e["channels"]) for e in monitor.events] == [(3000, ["0"])]


def test_memory_is_bounded() -> None:
    """What is held does not grow with the feed, and no snapshot is larger than it."""
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    monitor.push_many(plant(18, 4000))
    held = monitor.nbytes
    for samples in (4000, 3999, 3998, 5000):
        monitor.push_many(plant(18, samples))
        assert monitor.nbytes < 1.05 * held
        assert len(to_bytes(monitor)) < held + 100_000


def test_channel_without_a_value_in_the_baseline() -> None:
    """A dead channel leaves the others watched and the limit refined; its first value is news."""
    feed = plant(19, 6000)
    feed[:5900, 4] = np.nan
    monitor, table = run(feed, [6000])
    assert monitor.constant == ("c4",)
    limits = table["limit"].to_numpy()
    assert np.unique(limits[BASELINE:5900]).size > 1
    assert table["novel"].to_numpy()[BASELINE:5900].mean() < 2e-3
    assert [(e["start"], e["channels"]) for e in monitor.events] == [(5900, ["c4"])]


def test_every_sample_has_gaps() -> None:
    """A feed of which every sample lacks two channels is learnt and watched all the same."""
    feed = plant(20, 3000)
    rng = np.random.default_rng(22)
    for row in feed:
        row[rng.choice(10, 2, replace=False)] = np.nan
    feed[2500:2700, 10] += 12.0 * units(20)[10]
    monitor, table = run(feed, [3000])
    assert monitor.rank == 3
    assert table["novel"].to_numpy()[BASELINE:2500].mean() < 5e-3
    assert [e["channels"][0] for e in monitor.events] == ["c10"]


def test_nothing_moves_in_the_baseline() -> None:
    """Where every channel is constant, any movement is novel, and nothing else is."""
    monitor = NoveltyMonitor(NAMES, baseline=100)
    still = np.full((300, 12), 2.0)
    table = monitor.push_many(still)
    assert monitor.constant == tuple(NAMES)
    assert not table["novel"].to_numpy().any()
    still[0, 3] = 2.0000001
    assert monitor.push(still[0]).novel


def test_noise_too_large_to_square_is_refused_by_name() -> None:
    """A baseline that double precision cannot square names its channel and changes nothing."""
    feed = plant(21, BASELINE)
    feed[:, 7] *= 1e200
    monitor = NoveltyMonitor(NAMES, baseline=BASELINE)
    with pytest.raises(SampleError, match="channel 'c7': its noise"):
        monitor.push_many(feed)
    assert monitor.count == 0
    assert not monitor.baseline_done


@pytest.mark.parametrize(
    ("settings", "name"),
    [
        ({"baseline": 5}, "baseline"),
        ({"false_alarm": 0.0}, "false_alarm"),
        ({"limits": "guess"}, "limits"),
        ({"rank": 12}, "rank"),
        ({"persistence": (5, 4)}, "persistence"),
        ({"quiet": 0}, "quiet"),
        ({"same": 1.5}, "same"),
        ({"half_life": 0.0}, "half_life"),
    ],
)
def test_setting_out_of_range_is_named(settings: dict[str, Any], name: str) -> None:
    """A setting outside its range is refused with its name."""
    with pytest.raises(SettingError, match=name):
        NoveltyMonitor(NAMES, **settings)


def test_a_monitor_says_at_a_prompt_how_far_it_is() -> None:
    """Its text tells channels, stage and samples."""
    monitor = NoveltyMonitor(NAMES, baseline=100)
    assert repr(monitor) == "NoveltyMonitor(12 channels, baseline of 100, 0 samples)"
    monitor.push_many(np.random.default_rng(3).standard_normal((101, 12)))
    assert repr(monitor) == f"NoveltyMonitor(12 channels, rank {monitor.rank}, 101 samples)"
