"""The rank rules against their published examples, and their hit rate on feeds of known rank."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis import PrincipalBasis
from streambasis.ranks import (
    Spectrum,
    description_lengths,
    optimal_threshold,
    rank_by_mdl,
    rank_by_noise,
)
from tests.reference_principal import batch, normal

RUNS, LEAST_RIGHT = 100, 99

# Wax & Kailath (1985), Detection of signals by information theoretic criteria, IEEE Trans. ASSP
# 33, section V: seven sensors, N = 100, two sources, and the MDL values printed there
WAX_KAILATH = np.array([21.2359, 2.1717, 1.4279, 1.0979, 1.0544, 0.9432, 0.7324])
WAX_KAILATH_MDL = [590.4, 67.2, 66.9, 80.7, 95.5, 105.2, 110.5]


def test_mdl_gives_the_published_lengths() -> None:
    """The complex form reproduces the worked example of Wax & Kailath and chooses two sources."""
    spectrum = Spectrum(WAX_KAILATH, 0.0, 7, 100.0, True)
    lengths = description_lengths(spectrum)
    np.testing.assert_allclose(lengths, WAX_KAILATH_MDL, atol=0.06)
    assert rank_by_mdl(spectrum, 7) == 2


def test_mdl_of_real_data_has_fewer_parameters() -> None:
    """On the same values taken as real data the description with one source is the shortest."""
    assert rank_by_mdl(Spectrum(WAX_KAILATH, 0.0, 7, 100.0, False), 7) == 1


def test_mdl_needs_only_the_sum_of_what_is_not_held() -> None:
    """Leaving out the last energies but their sum changes no difference of lengths."""
    whole = description_lengths(Spectrum(WAX_KAILATH, 0.0, 7, 100.0, True))
    cut = Spectrum(WAX_KAILATH[:4], float(WAX_KAILATH[4:].sum()), 7, 100.0, True)
    lengths = description_lengths(cut)
    np.testing.assert_allclose(np.diff(lengths), np.diff(whole)[:4], rtol=1e-12)


@pytest.mark.parametrize(("aspect", "threshold"), [(1.0, 2.3094), (0.5, 1.9786)])
def test_threshold_is_the_published_one(aspect: float, threshold: float) -> None:
    """Gavish & Donoho (2014), IEEE Trans. IT 60, table of the thresholds for known noise."""
    assert optimal_threshold(aspect) == pytest.approx(threshold, abs=5e-5)


def test_noise_estimate_counts_what_the_leading_directions_absorb() -> None:
    """With the true rank the noise variance has no bias even where samples are few."""
    rng = np.random.default_rng(1)
    found = []
    for _ in range(200):
        feed = 10 * rng.standard_normal((40, 4)) @ rng.standard_normal((4, 16))
        energies, _, _ = batch(feed + rng.standard_normal((40, 16)))
        found.append(Spectrum(energies, 0.0, 16, 40.0, False).noise(4))
    # 432 degrees of freedom a run: the mean of 200 has a standard error of 0.5 %
    assert np.mean(found) == pytest.approx(1.0, abs=0.015)


@pytest.mark.parametrize("rule", [rank_by_noise, rank_by_mdl])
def test_nothing_and_noiseless_feeds_have_a_rank(rule) -> None:
    """No sample means rank 0; without any noise every direction held is signal."""
    assert rule(Spectrum(np.zeros(0), 0.0, 8, 0.0, False), 8) == 0
    assert rule(Spectrum(np.zeros(0), 0.0, 8, 100.0, False), 8) == 0
    assert rule(Spectrum(np.array([3.0, 2.0, 1e-9]), 0.0, 8, 100.0, False), 8) == 3
    assert rule(Spectrum(np.ones(8), 0.0, 8, 1e6, False), 8) == 0
    assert rule(Spectrum(np.array([2.0]), 0.0, 1, 50.0, False), 1) <= 1


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
@pytest.mark.parametrize(
    ("channels", "sources", "samples", "forget"),
    [(8, 2, 200, 1.0), (16, 3, 400, 0.98), (32, 5, 24, 1.0), (96, 4, 200, 1.0)],
)
def test_rules_find_the_number_of_sources(
    channels: int, sources: int, samples: int, forget: float, dtype: str
) -> None:
    """At 10 dB on every channel both rules are right in at least 99 of 100 runs."""
    right = {"noise": 0, "mdl": 0}
    for seed in range(RUNS):
        rng = np.random.default_rng(seed)
        mixing = normal(rng, (sources, channels), dtype)
        feed = np.sqrt(10.0) * normal(rng, (samples, sources), dtype) @ mixing
        feed = feed + normal(rng, (samples, channels), dtype)
        basis = PrincipalBasis(channels, max_rank=8, block=50, forget=forget, dtype=dtype)
        basis.take_many(feed)
        basis.flush()
        right["noise"] += basis.rank == sources
        right["mdl"] += rank_by_mdl(basis._core.core.spectrum(), channels) == sources
    assert min(right.values()) >= LEAST_RIGHT, right
