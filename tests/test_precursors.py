"""Exceedances that lead up to an event never lift the limit; those that were chance refine it."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis.monitor import NoveltyMonitor
from streambasis.monitor.precursors import MOST, Precursors


def held(quiet: int, numbers: list[int]) -> Precursors:
    """Return precursors that hold exceedances with their own numbers as values."""
    precursors = Precursors(quiet)
    precursors.hold(np.array(numbers), np.array(numbers, float))
    return precursors


def test_chance_is_released_after_a_quiet_run() -> None:
    """What lies a quiet run before now is chance; the chain that reaches to now is not yet."""
    precursors = held(10, [3, 8, 40, 45])
    assert precursors.release(50).tolist() == [3, 8]
    assert precursors.release(55).tolist() == []
    assert precursors.release(56).tolist() == [40, 45]


def test_an_event_claims_the_chain_that_leads_up_to_it() -> None:
    """The exceedances before the start without a quiet run between, and all after it, are gone."""
    precursors = held(10, [3, 20, 28, 38, 45, 46])
    precursors.claim(45)
    assert precursors.release(1000).tolist() == [3]


def test_what_is_held_is_bounded() -> None:
    """A chain without end is released from its beginning."""
    precursors = held(10, list(range(MOST + 5)))
    assert precursors.release(MOST + 5).tolist() == [0, 1, 2, 3, 4]


def test_a_restart_changes_nothing() -> None:
    """State and back, the same exceedances are held."""
    precursors = Precursors.from_state(held(10, [3, 20]).to_state())
    assert precursors.quiet == 10
    assert precursors.release(1000).tolist() == [3, 20]


@pytest.mark.parametrize("length", [150, 600, 2000])
def test_a_growing_fault_does_not_hide_itself(length: int) -> None:
    """The limit after a ramp is that before it, nearly, and a later fault is found at once."""
    rng = np.random.default_rng(5)
    start = 6000
    rows = start + length + 3000
    feed = rng.standard_normal((rows, 3)) @ rng.standard_normal((3, 16))
    feed += 0.5 * rng.standard_normal(feed.shape)
    feed[start : start + length, 4] += np.linspace(0.0, 6.0, length)
    feed[-1000:-800, [1, 9]] += 4.0
    monitor = NoveltyMonitor(16)
    limits = monitor.push_many(feed)["limit"].to_numpy()
    assert limits[-1] < 1.5 * limits[start]
    found = [(event["start"], event["channels"]) for event in monitor.events]
    ramps = [channels for first, channels in found if first < start + length]
    assert ["4"] in ramps
    assert any(rows - 1000 <= first < rows - 990 for first, _ in found)
