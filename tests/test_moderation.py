"""Variances of single channels, drawn to those of the others where few samples tell them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special

from streambasis.monitor.moderation import digamma, inverse_trigamma, moderated, trigamma

ARGUMENTS = [1e-3, 0.05, 0.5, 1.0, 2.5, 9.99, 10.0, 300.0, 1e6]


@pytest.mark.parametrize("x", ARGUMENTS)
def test_polygamma_functions_are_those_of_scipy(x: float) -> None:
    """Digamma, trigamma and its inverse agree with scipy.special."""
    assert digamma(x) == pytest.approx(float(special.digamma(x)), rel=1e-12, abs=1e-12)
    assert trigamma(x) == pytest.approx(float(special.polygamma(1, x)), rel=1e-12)
    assert inverse_trigamma(trigamma(x)) == pytest.approx(x, rel=1e-9)


def test_prior_is_recovered() -> None:
    """Of variances drawn from s₀²·d₀/χ²(d₀) the d₀ is found, and errors of few samples shrink."""
    rng = np.random.default_rng(1)
    n, prior = 20_000, 6.0
    true = 4.0 * prior / rng.chisquare(prior, n)
    freedom = rng.choice([3.0, 20.0], n)
    logs = np.log(true * rng.chisquare(freedom) / freedom)
    drawn, found = moderated(logs, freedom)
    assert found == pytest.approx(prior, rel=0.05)
    unknown = moderated(np.append(logs, 0.0), np.append(freedom, 0.0))[0][-1]
    assert np.exp(unknown) == pytest.approx(4.0, rel=0.05)
    few = freedom == 3.0
    assert np.mean((drawn - np.log(true))[few] ** 2) < 0.5 * np.mean(
        (logs - np.log(true))[few] ** 2
    )


def test_unlike_units_stay_apart() -> None:
    """Well-told variances of channels in unlike units, twenty powers of ten apart, hardly move."""
    rng = np.random.default_rng(2)
    logs = rng.uniform(-23.0, 23.0, 40)
    drawn, prior = moderated(logs, np.full(40, 1000.0))
    assert prior < 0.3
    assert np.abs(drawn - logs).max() < 0.02


def test_common_unit_scales_through() -> None:
    """A factor on all channels is a factor on what comes out."""
    rng = np.random.default_rng(3)
    logs, freedom = rng.normal(size=12), rng.uniform(1, 50, 12)
    drawn, shifted = moderated(logs, freedom)[0], moderated(logs + 400.0, freedom)[0]
    assert shifted - 400.0 == pytest.approx(drawn, abs=1e-9)


def test_three_channels_say_nothing_about_one_another() -> None:
    """With too few channels every variance stays, and an unknown one is their geometric mean."""
    logs = np.array([0.0, 1.0, 5.0, 99.0])
    drawn, prior = moderated(logs, np.array([5.0, 5.0, 5.0, 0.0]))
    assert drawn.tolist() == [0.0, 1.0, 5.0, 2.0]
    assert prior == 0.0
