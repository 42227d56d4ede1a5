"""Contributions of channels: the published form, and who is named for a fault."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from streambasis.monitor.contributions import leading, reconstruction_based, shares


def directions(seed: int, channels: int, rank: int) -> NDArray[np.float64]:
    """Return random orthonormal directions."""
    rng = np.random.default_rng(seed)
    return np.ascontiguousarray(np.linalg.qr(rng.normal(size=(channels, rank)))[0].T)


def residual(samples: NDArray[np.float64], vectors: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return what samples have outside the directions."""
    return np.asarray(samples - (samples @ vectors.T) @ vectors)


def test_reconstruction_is_the_best_correction_of_one_channel() -> None:
    """The contribution is the drop in SPE when the channel is set to fit best.

    Alcala & Qin (2009), Automatica 45:1593; the drop is minimized here by brute force.
    """
    vectors = directions(1, 7, 3)
    sample = np.random.default_rng(2).normal(size=7)
    found = reconstruction_based(residual(sample, vectors), vectors)
    for channel in range(7):
        steps = np.linspace(-20, 20, 400_001)[:, None] * np.eye(7)[channel]
        least = np.min(np.sum(residual(sample - steps, vectors) ** 2, axis=1))
        whole = np.sum(residual(sample, vectors) ** 2)
        assert found[channel] == pytest.approx(whole - least, abs=1e-6)


def test_fault_of_one_channel_has_the_largest_contribution() -> None:
    """For a fault without noise the faulty channel is always first (Alcala & Qin 2009, section 4).

    Squared residuals do not promise that: here they name an innocent channel.
    """
    vectors = np.array([[0.95, 0.3, 0.0], [0.0, 0.0, 1.0]])
    vectors[0] /= np.linalg.norm(vectors[0])
    left = residual(np.array([1.0, 0.0, 0.0]), vectors)
    assert np.argmax(left**2) == 1
    assert np.argmax(reconstruction_based(left, vectors)[:1]) == 0
    for seed in range(50):
        vectors = directions(seed, 12, 5)
        for channel in range(12):
            left = residual(np.eye(12)[channel], vectors)
            found = reconstruction_based(left, vectors)
            assert found[channel] == pytest.approx(found.max())


@pytest.mark.parametrize("count", [1, 2, 3])
def test_shares_are_those_of_the_fault(count: int) -> None:
    """Fault on some channels, many samples of noise: shares are the squares of its parts."""
    rng = np.random.default_rng(count)
    vectors = directions(3, 30, 6)
    fault = np.zeros(30)
    fault[rng.choice(30, count, replace=False)] = rng.uniform(4, 6, count)
    left = residual(fault + rng.normal(size=(64, 30)), vectors)
    found = shares(left, vectors, 64)
    assert found == pytest.approx(fault**2 / np.sum(fault**2), abs=0.06)
    assert found.sum() == pytest.approx(1.0)


def test_single_samples_name_the_channel() -> None:
    """One sample at about three times the limit names its channel in nearly every case."""
    rng = np.random.default_rng(5)
    vectors = directions(4, 30, 6)
    hits = 0
    for _ in range(200):
        channel = int(rng.integers(30))
        sample = rng.normal(size=30)
        sample[channel] += 14.0
        hits += int(np.argmax(shares(residual(sample[None], vectors), vectors, 1))) == channel
    assert hits >= 195


def test_fault_of_all_channels_is_shared_out() -> None:
    """A fault on more channels than are selected has the rest shared out by squared residual."""
    vectors = directions(6, 100, 5)
    fault = np.random.default_rng(7).choice([-3.0, 3.0], 100)
    found = shares(residual(fault[None], vectors), vectors, 1)
    assert found.sum() == pytest.approx(1.0)
    assert np.count_nonzero(found > 0.002) > 40


def test_hidden_channels_get_nothing() -> None:
    """A channel that is itself a direction shows in no residual and has no contribution."""
    vectors = np.eye(5)[:1]
    left = residual(np.array([[3.0, 1.0, 0.0, 0.0, 0.0]]), vectors)
    assert reconstruction_based(left, vectors)[0] == 0.0
    assert shares(left, vectors, 1)[1] == pytest.approx(1.0)
    assert not shares(np.zeros((1, 5)), vectors, 1).any()


def test_an_adopted_channel_is_not_blamed_for_what_comes_after() -> None:
    """A channel that is a direction but for that direction's error is innocent of the next fault.

    The error of the direction is along the fault, so that channel alone would explain all of it.
    """
    fault = np.zeros(6)
    fault[[1, 2]] = 6.0, 5.0
    adopted = 0.01 * fault / np.linalg.norm(fault)
    adopted[5] = np.sqrt(1.0 - adopted @ adopted)
    left = residual(np.tile(fault, (64, 1)), adopted[None])
    assert np.argmax(reconstruction_based(left, adopted[None])) == 5
    found = shares(left, adopted[None], 64)
    assert found[5] == 0.0
    assert found == pytest.approx(fault**2 / np.sum(fault**2), abs=0.01)


def test_where_no_channel_can_be_told_all_share() -> None:
    """When but one dimension is left, along all of 200 channels alike, each has the same part."""
    axes = np.column_stack([np.ones(200), np.eye(200)[:, 1:]])
    vectors = np.linalg.qr(axes)[0].T[1:]
    found = shares(residual(9.0 * np.eye(200)[:1], vectors), vectors, 1)
    assert found == pytest.approx(np.full(200, 1 / 200))


def test_fewest_channels_that_make_the_part() -> None:
    """Names stop as soon as 90 % are reached, and nobody without a share is named."""
    assert leading(np.array([0.3, 0.6, 0.1])).tolist() == [1, 0]
    assert leading(np.array([0.0, 1.0])).tolist() == [1]
    assert leading(np.zeros(3)).tolist() == []
    assert len(leading(np.full(10, 0.1))) == 9
