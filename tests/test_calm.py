"""Stretches that are raised all along, and what the limit makes of them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from streambasis import NoveltyMonitor
from streambasis.monitor.calm import STRETCH, Calm

LAW = stats.chi2(60)


def learnt(seed: int) -> Calm:
    """Return what 5,000 errors of ordinary running teach."""
    return Calm.learn(LAW.rvs(5000, random_state=seed), 100_000.0)


@pytest.mark.parametrize("law", [LAW, stats.lognorm(1.0), stats.chi2(2)])
def test_ordinary_stretches_are_calm(law: stats.rv_continuous) -> None:
    """Of a hundred thousand errors next to none are taken for raised, heavy tails included."""
    calm = Calm.learn(law.rvs(5000, random_state=1), 1e5)
    fine = [calm.tell(law.rvs(2000, random_state=seed)) for seed in range(50)]
    assert np.mean(fine) > 0.998


def test_raised_stretch_and_its_neighbours_are_told() -> None:
    """A rise that no sample shows by itself is told, with the stretches where it may begin."""
    values = LAW.rvs(1000, random_state=2)
    values[320:400] *= 1.5
    fine = learnt(3).tell(values)
    assert not fine[304:416].any()
    assert fine.sum() == 1000 - 112


def test_lone_exceedances_stay() -> None:
    """The median is not moved by single errors, however far out."""
    values = LAW.rvs(1000, random_state=4)
    values[::100] = 1e6
    assert learnt(5).tell(values).all()


def test_slow_rise_is_followed() -> None:
    """When the level creeps up by a fifth over many blocks, stretches stay calm."""
    calm = learnt(6)
    for k in range(60):
        fine = calm.tell((1.0 + 0.2 * k / 60) * LAW.rvs(2000, random_state=k))
        assert fine.mean() > 0.95
    assert calm.level > 1.05 * LAW.median()


def test_short_baseline_or_block_takes_all_for_calm() -> None:
    """With too few stretches to know how they scatter, or none at all, nothing is told."""
    values = LAW.rvs(100, random_state=7)
    assert Calm.learn(values, 1e5).tell(1e9 * values).all()
    assert learnt(8).tell(1e9 * values[: STRETCH - 1]).all()


def test_faults_below_the_limit_do_not_lift_it() -> None:
    """Frequent faults, many too weak to exceed the limit, leave it where it was; most are events.

    With 120 channels a fault of a few has to be strong before single samples exceed the limit.
    """
    rng = np.random.default_rng(9)
    n, faults = 120, 20
    loads = rng.normal(size=(4, n))
    monitor = NoveltyMonitor(n, baseline=2000, half_life=5000.0)
    monitor.push_many(rng.normal(size=(2000, 4)) @ loads + rng.normal(size=(2000, n)))
    before = monitor.push(rng.normal(size=n)).limit
    for _ in range(faults // 10):
        feed = rng.normal(size=(3000, 4)) @ loads + rng.normal(size=(3000, n))
        for start in range(100, 3000, 300):
            channels = rng.choice(n, 3, replace=False)
            feed[start : start + int(rng.integers(30, 100)), channels] += rng.uniform(4.0, 12.0)
        table = monitor.push_many(feed)
    assert table["limit"][-1].as_py() == pytest.approx(before, rel=0.1)
    assert len(monitor.events) > 0.7 * faults
