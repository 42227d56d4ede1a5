"""Centre, noise and rank from a baseline, and what constant channels come to."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from sklearn.decomposition import FactorAnalysis

from streambasis.monitor.scaling import (
    SEEN,
    fit_scaling,
    longest_runs,
    mdl_rank,
    most_directions,
    noise_variances,
    robust_start,
)

WAX_KAILATH = np.array([21.2359, 2.1717, 1.4279, 1.0979, 1.0544, 0.9432, 0.7324])
"""Wax & Kailath (1985), Detection of signals by information theoretic criteria, IEEE Trans. ASSP
33:387: eigenvalues of a covariance over 100 samples."""


def shared(
    seed: int, samples: int, channels: int, sources: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return channels that share sources, with noise of unequal size, and the sizes."""
    rng = np.random.default_rng(seed)
    sizes = np.exp(rng.uniform(np.log(0.3), np.log(3.0), channels))
    loads = 1.5 * rng.normal(size=(sources, channels))
    feed = rng.normal(size=(samples, sources)) @ loads
    return feed + rng.normal(size=(samples, channels)) * sizes, sizes


def test_rank_by_description_length_of_real_data() -> None:
    """On the paper's eigenvalues the rule for real data gives 1 (its complex-data form gives 2)."""
    assert mdl_rank(WAX_KAILATH, 100, 6) == 1
    assert mdl_rank(np.ones(10), 1000, 6) == 0
    assert mdl_rank(np.array([9.0, 5.0, 1.0, 1.0, 1.0]), 1000, 3) == 2


@pytest.mark.parametrize(("channels", "sources"), [(8, 2), (16, 4), (30, 4), (64, 6)])
@pytest.mark.parametrize("samples", [1000, 5000])
def test_noise_and_rank_are_found(channels: int, sources: int, samples: int) -> None:
    """The true number of sources is found, and the noise of most channels within 5 %."""
    feed, sizes = shared(channels, samples, channels, sources)
    scaling = fit_scaling(feed)[0]
    assert scaling.rank == sources
    errors = np.abs(np.log(scaling.scale / sizes))
    assert np.median(errors) < 0.05
    assert np.quantile(errors, 0.9) < 0.2


def test_variances_agree_with_maximum_likelihood() -> None:
    """Noise variances are near those of scikit-learn's factor analysis by maximum likelihood."""
    feed, _ = shared(3, 5000, 20, 3)
    z = (feed - feed.mean(axis=0)) / feed.std(axis=0)
    variances, rank = noise_variances(z, rank=3)
    expected = FactorAnalysis(3, tol=1e-8, max_iter=5000).fit(z).noise_variance_
    assert rank == 3
    assert np.log(variances) == pytest.approx(np.log(expected), abs=0.05)


def test_pure_noise_shares_nothing() -> None:
    """Independent channels have rank 0 by either rule, and their noise is all of them."""
    for channels in (6, 40):
        noise = np.random.default_rng(4).normal(size=(3000, channels))
        variances, rank = noise_variances(noise)
        assert rank == 0
        assert variances == pytest.approx(np.ones(channels), abs=0.15)


def test_more_channels_than_samples() -> None:
    """A short baseline of many channels is split by its Gram matrix; strong sources are found."""
    feed, sizes = shared(5, 300, 900, 3)
    scaling, z, _ = fit_scaling(feed)
    assert scaling.rank == 3
    assert np.median(np.abs(np.log(scaling.scale / sizes))) < 0.1
    assert z.shape == feed.shape


def test_bound_on_directions_is_ledermanns() -> None:
    """At the bound a factor model has as many parameters as the covariance has entries, or fewer.

    Ledermann (1937), Psychometrika 2:85.
    """
    for n in range(1, 200):
        r = most_directions(n)
        assert (n - r) ** 2 >= n + r
        assert (n - r - 1) ** 2 < n + r + 1 or r == n - 1


def test_constant_and_nearly_constant_channels() -> None:
    """Constant channels are named and divided by no zero; a status that seldom moves has a unit."""
    rng = np.random.default_rng(6)
    feed = rng.normal(size=(500, 5))
    feed[:, 1] = 4.5
    feed[:, 2] = 1e6 * (1 + 1e-16 * rng.normal(size=500))
    feed[:, 3] = 0.0
    feed[rng.choice(500, 9, replace=False), 3] = 1.0
    scaling, z, _ = fit_scaling(feed)
    assert scaling.constant.tolist() == [False, True, False, False, False]
    assert scaling.nearly.tolist() == [False, False, True, True, False]
    assert (scaling.scale > 0).all()
    assert np.isfinite(z).all()
    assert scaling.scale[3] == pytest.approx(1 / SEEN, rel=0.01)
    assert np.abs(z[:, :3:2]).max() < 10


def test_outliers_do_not_set_centre_or_noise() -> None:
    """One sample in 200 a thousand times too large leaves centre, noise and rank as they were."""
    feed, sizes = shared(7, 2000, 30, 3)
    bad = feed.copy()
    bad[::200] *= 1000.0
    scaling, z, fit = fit_scaling(bad)
    assert scaling.rank == 3
    assert np.median(np.abs(np.log(scaling.scale / sizes))) < 0.1
    assert np.abs(z).max() < 1000
    assert not fit[::200].any()
    assert fit.sum() == 1990


def test_missing_values_are_passed_over() -> None:
    """Centre and spread come from the values there are; a channel without any is constant."""
    rng = np.random.default_rng(8)
    values = rng.normal(5.0, 2.0, size=(4000, 3))
    values[rng.random(values.shape) < 0.2] = np.nan
    values[:, 2] = np.nan
    centre, spread, constant, nearly = robust_start(values)
    assert centre[:2] == pytest.approx([5.0, 5.0], abs=0.2)
    assert spread[:2] == pytest.approx([2.0, 2.0], rel=0.1)
    assert constant.tolist() == [False, False, True]
    assert not nearly.any()


def test_longest_runs_are_counted_per_channel() -> None:
    """Repetitions are counted without a break, and a missing value is a break."""
    values = np.array([[1.0, 2], [1, 2], [1, np.nan], [0, 2], [0, 2], [0, 2], [0, 2]])
    assert longest_runs(values).tolist() == [3, 3]


def test_first_movements_are_ordinary_where_the_baseline_shows_many() -> None:
    """Constant channels are measured like the others once first movements are to be expected."""
    rng = np.random.default_rng(30)
    values = rng.normal(size=(400, 12))
    values[:, 8:] = 0.0
    rare, _, _ = fit_scaling(values)
    assert not rare.firsts
    assert (rare.scale[8:] < 1e-50).all()
    seldom = np.zeros((400, 24))
    seldom[rng.integers(400, size=18), np.arange(18)] = rng.uniform(2.0, 8.0, 18)
    often, _, _ = fit_scaling(np.hstack([values, seldom]))
    assert often.firsts
    assert often.constant.sum() == 4 + 6
    usual = often.scale[~often.constant]
    assert (often.scale[often.constant] > usual.min()).all()
    assert (often.scale[often.constant] < usual.max()).all()


def test_patience_grows_with_repetition() -> None:
    """A channel that repeats its value often in the baseline may do so for longer."""
    rng = np.random.default_rng(31)
    values = np.column_stack([rng.normal(size=2000), rng.integers(0, 3, 2000)])
    scaling, _, _ = fit_scaling(values)
    assert scaling.patience[0] == 32
    # it repeats one time in three; 5/6 is the chance where it changes a quarter as often
    assert scaling.patience[1] == pytest.approx(np.log(1e-9) / np.log(5 / 6), rel=0.05)


def test_burst_in_few_samples_does_not_make_a_channel_blind() -> None:
    """A variance that few samples tell is drawn to what the other channels have."""
    rng = np.random.default_rng(32)
    values = rng.normal(size=(60, 30))
    values[:, 0] *= 1e-3
    values[::20, 0] = 0.3
    drawn = fit_scaling(values)[0].scale
    long = fit_scaling(rng.normal(size=(5000, 30)) * np.r_[1e-3, np.ones(29)])[0].scale
    assert drawn[0] > 0.1
    assert long[0] == pytest.approx(1e-3, rel=0.05)
