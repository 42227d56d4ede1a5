"""Directions of events, and which earlier event they repeat."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from streambasis.monitor.events import COLLECT, HELD, KEPT_EVENTS, Event, History, OpenEvent


def shown(
    seed: int, count: int, directions: NDArray[np.float64], amounts: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return residuals: unit noise plus directions in the amounts given per sample."""
    rng = np.random.default_rng(seed)
    return amounts @ directions + rng.normal(size=(count, directions.shape[1]))


def opened(residuals: NDArray[np.float64]) -> OpenEvent:
    """Return an event that has collected residuals in pieces, as the monitor gives them."""
    event = OpenEvent(0, 0, 0, residuals.shape[1])
    for start in range(0, len(residuals), COLLECT):
        event.collect(residuals[start : start + COLLECT], 1.0, start)
        event.settle(1.0, residuals.shape[1], 60.0)
    return event


def closed(number: int, direction: NDArray[np.float64]) -> Event:
    """Return a closed event with a direction."""
    return Event({"event": number, "start": 3, "end": 7}, direction[None], open=False)


def unit(*values: float) -> NDArray[np.float64]:
    """Return a vector of length one."""
    array = np.array(values)
    return np.asarray(array / np.linalg.norm(array))


def test_direction_of_a_shift_is_found() -> None:
    """A shift of 8 in 24 channels has its direction within 5 degrees after 96 samples, one only."""
    direction = unit(*np.random.default_rng(1).normal(size=24))
    event = opened(shown(2, 96, direction[None], np.full((96, 1), 8.0)))
    assert event.directions.shape == (1, 24)
    assert abs(event.directions[0] @ direction) > np.cos(np.radians(5))


def test_direction_needs_no_sign() -> None:
    """A fault that swings, or only adds noise to a channel, has a direction as well."""
    rng = np.random.default_rng(3)
    direction = np.eye(24)[5]
    for amounts in (10 * np.sin(np.arange(128) / 3.0), 10 * rng.normal(size=128)):
        event = opened(shown(4, 128, direction[None], amounts[:, None]))
        assert abs(event.directions[0] @ direction) > 0.99


def test_directions_of_an_event_are_counted() -> None:
    """An event in two directions has two, orthonormal and strongest first."""
    rng = np.random.default_rng(5)
    directions = np.linalg.qr(rng.normal(size=(20, 2)))[0].T
    event = opened(shown(6, 160, directions, rng.normal(size=(160, 2)) * [12.0, 7.0]))
    assert event.directions.shape == (2, 20)
    assert event.directions @ event.directions.T == pytest.approx(np.eye(2), abs=1e-12)
    assert abs(event.directions[0] @ directions[0]) > 0.98


def test_event_explains_itself_once_its_direction_is_known() -> None:
    """Settling says whether the directions explain what came last; noise in all they do not."""
    direction = unit(*np.ones(20))
    shift = OpenEvent(0, 0, 0, 20)
    shift.collect(shown(7, 32, direction[None], np.full((32, 1), 9.0)), 1.0, 0)
    assert shift.settle(1.0, 20, 45.0)
    loud = OpenEvent(0, 0, 0, 20)
    loud.collect(4.0 * np.random.default_rng(8).normal(size=(32, 20)), 1.0, 0)
    assert not loud.settle(1.0, 20, 45.0)


def test_long_event_takes_bounded_memory() -> None:
    """Ten thousand samples are held as eight weighted directions."""
    event = opened(shown(9, 10_000, np.eye(6)[:1], np.full((10_000, 1), 5.0)))
    assert event.rows.shape == (HELD + COLLECT, 6)
    assert event.count == 10_000
    # 25 of the shift and 1 of noise along it, per sample
    assert np.sum(event.rows[0] ** 2) / event.count == pytest.approx(26.0, rel=0.05)


def test_nearest_earlier_event_is_named() -> None:
    """A direction repeats the nearest of earlier events within the floor, whatever its sign."""
    history = History(3, 0.8)
    assert history.match(unit(1, 0, 0), 0) == (None, None)
    for number, direction in enumerate((unit(1, 0, 0), unit(0, 1, 0), unit(1, 1, 0))):
        history.put(closed(number, direction))
    number, cosine = history.match(unit(-1, 0.1, 0), 3)
    assert number == 0
    assert cosine == pytest.approx(np.cos(np.arctan(0.1)))
    assert history.match(unit(0, 0, 1), 3) == (None, None)
    assert history.match(unit(0.1, 1, 0), 1) == (None, None)


def test_old_events_are_forgotten_in_the_end() -> None:
    """Beyond the most kept, the oldest goes; the rest is still found by number."""
    history = History(2, 0.9)
    history.events = {i: closed(i, unit(1, 0)) for i in range(KEPT_EVENTS)}
    history.put(closed(KEPT_EVENTS, unit(0, 1)))
    assert len(history.events) == KEPT_EVENTS
    assert 0 not in history.events
    assert history.match(unit(0, 1), KEPT_EVENTS + 1) == (KEPT_EVENTS, 1.0)


def test_event_is_a_plain_mapping_with_more() -> None:
    """Keys become JSON; direction, duration and whether it lasts are attributes."""
    event = closed(2, unit(3, 4))
    assert dict(event) == {"event": 2, "start": 3, "end": 7}
    assert event.duration == 5
    assert event.direction == pytest.approx([0.6, 0.8])
    assert not event.open


def test_history_goes_on_where_it_was() -> None:
    """A history built from a state finds the same repetitions."""
    history = History(2, 0.5)
    fields: dict[str, Any] = {"event": 0, "start": 1, "end": 2}
    history.put(Event(fields, np.eye(2), open=False))
    history.put(closed(1, unit(1, 2)))
    history.next = 2
    again = History.from_state(history.to_state())
    assert again.next == 2
    assert again.events == history.events
    assert again.events[0].directions.tolist() == np.eye(2).tolist()
    assert again.match(unit(1, 2.1), 2) == history.match(unit(1, 2.1), 2)
