"""Control limits against published values and against the distributions they claim."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from streambasis.monitor.limits import (
    KEPT,
    SpeLimit,
    box_limit,
    jackson_mudholkar_limit,
    pareto_fit,
    t2_limit,
)

JACKSON_1980 = np.array([
    (10, 10.7), (10.4, 9.8), (9.7, 10), (9.7, 10.1), (11.7, 11.5), (11, 10.8), (8.7, 8.8),
    (9.5, 9.3), (10.1, 9.4), (9.6, 9.6), (10.5, 10.4), (9.2, 9), (11.3, 11.6), (10.1, 9.8),
    (8.5, 9.2),
])  # fmt: skip
"""J. E. Jackson (1980), Principal components and factor analysis, part I, Journal of Quality
Technology 12:201: two methods of a chemical analysis."""


def test_published_limits_of_two_discarded_roots() -> None:
    """Roots 29.33 and 16.42 at 0.05: Jackson & Mudholkar 140.44, Box 140.83, near Imhof's 139.94.

    J. E. Jackson (1991), A User's Guide to Principal Components (from memory: prints 140.45).
    """
    roots = np.array([29.33, 16.42])
    assert jackson_mudholkar_limit(roots, 0.05) == pytest.approx(140.44, abs=0.01)
    box = box_limit(roots.sum(), 2 * np.sum(roots**2), 0.05)
    assert box == pytest.approx(140.83, abs=0.01)


def test_five_equal_roots() -> None:
    """For equal roots Box's limit is exact, 11.0705 at 0.05; Jackson & Mudholkar's is 11.0439."""
    assert jackson_mudholkar_limit(np.ones(5), 0.05) == pytest.approx(11.0439, abs=5e-5)
    assert box_limit(5.0, 10.0, 0.05) == pytest.approx(stats.chi2.isf(0.05, 5), rel=1e-12)


def test_chemical_data_of_jackson() -> None:
    """SPE catches C and D, T² catches A and B (roots and scores: Jackson 1980)."""
    mean = JACKSON_1980.mean(axis=0)
    roots, vectors = np.linalg.eigh(np.cov(JACKSON_1980.T))
    assert roots[::-1] == pytest.approx([1.446474, 0.086383], abs=5e-7)
    new = np.array([(12.3, 12.5), (7, 7.3), (11, 9), (7.3, 9.1)]) - mean
    spe, along = (new @ vectors[:, 0]) ** 2, (new @ vectors[:, 1]) ** 2 / roots[1]
    assert spe == pytest.approx([0.0491, 0.0136, 1.9989, 1.4696], abs=5e-5)
    assert along == pytest.approx([7.944, 11.252, 0.00077, 4.584], abs=5e-4)
    limit = jackson_mudholkar_limit(roots[:1], 0.05)
    assert limit is not None
    assert (spe > limit).tolist() == [False, False, True, True]
    assert (along > t2_limit(1, 15, 0.05)).tolist() == [True, True, False, False]


def test_t2_limit_is_that_of_new_samples() -> None:
    """The F form for new samples (Tracy, Young & Mason 1992) holds where chi-squared is far off."""
    n, p, alpha = 20, 3, 0.01
    rng = np.random.default_rng(4)
    beyond = np.zeros(2)
    limits = np.array([t2_limit(p, n, alpha), stats.chi2.isf(alpha, p)])
    for _ in range(4000):
        base, new = rng.normal(size=(n, p)), rng.normal(size=(10, p))
        deviations = new - base.mean(axis=0)
        t2 = np.einsum("ij,ij->i", deviations @ np.linalg.inv(np.cov(base.T)), deviations)
        beyond += (t2[:, None] > limits).mean(axis=0)
    # 1.0 % and 4.9 %: Tracy, Young & Mason's case of few samples, recomputed
    assert beyond / 4000 == pytest.approx([alpha, 0.049], rel=0.12)
    assert t2_limit(0, 100, alpha) == t2_limit(5, 5, alpha) == np.inf


def test_no_limit_where_the_transform_breaks_down() -> None:
    """h0 <= 0 is told by None; the limit warns, and Box's serves in its place."""
    roots = np.concatenate([[10.0], np.full(200, 0.3)])
    assert jackson_mudholkar_limit(roots, 0.01) is None
    values = np.random.default_rng(5).chisquare(1, size=(3000, len(roots))) @ roots
    limit = SpeLimit("jackson-mudholkar", 0.01)
    with pytest.warns(RuntimeWarning, match="h0 <= 0"):
        limit.start(values, roots)
    box = SpeLimit("box", 0.01)
    box.start(values, roots)
    assert limit.value == box.value


@pytest.mark.parametrize("shape", [-0.2, 0.0, 0.3])
def test_pareto_fit_finds_shape_and_scale(shape: float) -> None:
    """Probability-weighted moments find the parameters that scipy.stats.genpareto was given."""
    values = stats.genpareto.rvs(shape, scale=2.0, size=40_000, random_state=6)
    assert pareto_fit(values) == pytest.approx((shape, 2.0), abs=0.05)


DISTRIBUTIONS = {
    "chi-squared": stats.chi2(24),
    "heavy": stats.lognorm(0.6),
    "light": stats.beta(2, 3),
}


@pytest.mark.parametrize("name", DISTRIBUTIONS)
@pytest.mark.parametrize("rate", [1e-2, 1e-3])
def test_tail_limit_is_exceeded_as_often_as_requested(name: str, rate: float) -> None:
    """From 5,000 values the true rate is within a factor of 2; 60,000 more bring it to 1.3."""
    rng = np.random.default_rng(7)
    law = DISTRIBUTIONS[name]
    limit = SpeLimit("tail", rate)
    limit.start(law.rvs(5000, random_state=rng), np.zeros(0))
    assert 0.5 < law.sf(limit.value) / rate < 2.0
    for _ in range(60):
        limit.take(law.rvs(1000, random_state=rng))
    assert 1 / 1.3 < law.sf(limit.value) / rate < 1.3


def test_leaving_out_exceedances_makes_the_limit_creep_down() -> None:
    """The reason why lone exceedances are taken: without them the rate grows severalfold."""
    rng = np.random.default_rng(8)
    law = stats.chi2(10)
    whole, cut = SpeLimit("tail", 1e-2), SpeLimit("tail", 1e-2)
    for limit in (whole, cut):
        limit.start(law.rvs(3000, random_state=9), np.zeros(0))
    for _ in range(200):
        values = law.rvs(1000, random_state=rng)
        whole.take(values)
        cut.take(values[values <= cut.value])
    assert law.sf(whole.value) == pytest.approx(1e-2, rel=0.2)
    assert law.sf(cut.value) > 3e-2


def test_limit_follows_noise_within_its_memory() -> None:
    """When the noise doubles, a limit with a memory follows, and what it holds stays bounded."""
    rng = np.random.default_rng(10)
    law = stats.chi2(10)
    limit = SpeLimit("tail", 1e-2, memory=20_000)
    limit.start(law.rvs(5000, random_state=rng), np.zeros(0))
    for _ in range(100):
        limit.take(2.0 * law.rvs(1000, random_state=rng))
        assert limit._excesses.size <= KEPT
    assert law.sf(limit.value / 2.0) == pytest.approx(1e-2, rel=0.3)


def test_state_goes_on_where_it_was() -> None:
    """A limit built from a state refines exactly as the one that gave it."""
    law = stats.chi2(10)
    limit = SpeLimit("tail", 1e-3, memory=9000)
    limit.start(law.rvs(4000, random_state=11), np.zeros(0))
    again = SpeLimit.from_state(limit.to_state())
    for seed in range(20):
        for each in (limit, again):
            each.take(law.rvs(1000, random_state=seed))
    assert again.value == limit.value
