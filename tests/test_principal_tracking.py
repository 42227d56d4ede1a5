"""How closely the principal basis follows a subspace: against theory and the batch SVD."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis import PrincipalBasis, principal_angles
from tests.reference_principal import batch, noisy_feed, normal, sine

BATCH_FACTOR = 1.05
THEORY_ERROR = 0.10
NOISE_ERROR = 0.02
JUMP_FACTOR = 1.5


@pytest.mark.parametrize("noise", [0.01, 0.2])
@pytest.mark.parametrize("block", [1, 7, 64])
@pytest.mark.parametrize(("channels", "samples"), [(32, 600), (256, 600), (1024, 300)])
def test_cut_at_the_true_rank_it_is_as_close_as_the_batch(
    channels: int, samples: int, block: int, noise: float
) -> None:
    """Cut at the true rank, the angle to the true subspace is that of the batch SVD within 5 %."""
    rng = np.random.default_rng(1)
    rows = np.linalg.qr(rng.standard_normal((channels, 4)))[0].T
    signal = rng.standard_normal((samples, 4)) @ rows
    disturbance = noise * rng.standard_normal((samples, channels))
    # noise against the sources' part in a channel, and against a source as a whole
    for feed in (np.sqrt(channels) * signal + disturbance, signal + disturbance):
        basis = PrincipalBasis(channels, rank=4, block=block)
        basis.take_many(feed)
        basis.flush()
        _, vectors, _ = batch(feed)
        assert sine(basis.vectors, rows) <= BATCH_FACTOR * sine(vectors[:4], rows)


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_stationary_error_is_that_of_theory(dtype: str) -> None:
    """The mean squared sines agree with the first-order formula, with forgetting in its place.

    Anderson (1963), Asymptotic theory for principal component analysis, Annals of Mathematical
    Statistics 34 (from memory): sum over i <= k < j of l_i l_j / (l_i - l_j)² / N for real data;
    N becomes (1 + f)/(1 - f). The expected squared sine of circular complex data is the same.
    """
    energies = np.array([10.0, 6.0, 4.0] + [1.0] * 9)
    forget = 0.996
    rng = np.random.default_rng(2)
    basis = PrincipalBasis(12, rank=3, forget=forget, block=25, dtype=dtype)
    squares, noises = [], []
    for step in range(700):
        basis.take_many(normal(rng, (250, 12), dtype) * np.sqrt(energies))
        if step >= 10:
            squares.append(12 - 9 - np.sum(np.abs(basis.vectors[:, :3]) ** 2))
            noises.append(basis.noise)
    signal, noise = energies[:3, None], energies[None, 3:]
    theory = np.sum(signal * noise / (signal - noise) ** 2) * (1 - forget) / (1 + forget)
    assert np.mean(squares) == pytest.approx(theory, rel=THEORY_ERROR)
    assert np.mean(noises) == pytest.approx(1.0, rel=NOISE_ERROR)


@pytest.mark.parametrize("channels", [16, 128])
def test_noise_variance_is_right(channels: int) -> None:
    """Estimated noise is within 2 % with few samples and many, cut and uncut, with a mean too."""
    for samples, forget in ((4000, 1.0), (1500, 1.0), (4000, 0.999)):
        rng = np.random.default_rng(3)
        feed, _ = noisy_feed(rng, samples, channels, 4, 0.5)
        basis = PrincipalBasis(channels, max_rank=8, centre=True, forget=forget)
        basis.take_many(feed + 3.0)
        basis.flush()
        assert basis.rank == 4
        assert basis.noise == pytest.approx(0.25, rel=NOISE_ERROR)


def test_a_jump_is_forgotten_after_five_half_lives() -> None:
    """After the subspace has jumped, five half-lives bring the error to 1.5 times the usual."""
    half_life = 60.0
    ratios = []
    for seed in range(20):
        rng = np.random.default_rng(seed)
        basis = PrincipalBasis(24, rank=3, half_life=half_life)
        before, rows = noisy_feed(rng, 1200, 24, 3, 0.3)
        stationary = []
        for piece in np.split(before, 20):
            basis.take_many(piece)
            stationary.append(sine(basis.vectors, rows))
        after, rows = noisy_feed(rng, round(5 * half_life), 24, 3, 0.3)
        basis.take_many(after)
        basis.flush()
        ratios.append(sine(basis.vectors, rows) / np.mean(stationary[8:]))
    assert np.mean(ratios) < JUMP_FACTOR


def test_a_turning_direction_is_followed_with_the_lag_of_theory() -> None:
    """A direction that turns by w a sample is followed half the argument of Σ f^t exp(-2iwt) late.

    The covariance held is the weighted mean of those of past samples, and that of a direction at
    angle a turns with exp(2ia).
    """
    rate, forget = 2e-3, 0.98
    rng = np.random.default_rng(4)
    basis = PrincipalBasis(6, rank=1, forget=forget, block=1)
    angles = rate * np.arange(6000)
    plane = np.stack([np.cos(angles), np.sin(angles), *np.zeros((4, 6000))], axis=1)
    feed = rng.standard_normal((6000, 1)) * plane + 0.02 * rng.standard_normal((6000, 6))
    lags = []
    for i, sample in enumerate(feed):
        basis.push(sample)
        if i >= 500:
            found = np.arctan2(basis.vectors[0, 1], basis.vectors[0, 0])
            lags.append((angles[i] - found + np.pi / 2) % np.pi - np.pi / 2)
    theory = -0.5 * np.angle(1.0 / (1.0 - forget * np.exp(-2j * rate)))
    assert np.mean(lags) == pytest.approx(theory, rel=THEORY_ERROR)


@pytest.mark.parametrize("rule", ["noise", "mdl"])
def test_bearings_read_off_the_subspace_reach_the_expected_precision(rule: str) -> None:
    """Bearings by root-finding on the tracked subspace come near the Cramér-Rao bound.

    Uniform linear array at half a wavelength, 10 dB: the rank is right in at least 99 of 100 runs
    and the roots of the signal subspace (root-MUSIC, Barabell 1983) give the bearings with the
    variance of MUSIC, Stoica & Nehorai (1989), IEEE Trans. ASSP 37, equation 3.12 (from memory):
    var(w) = s/(2N) · [P⁻¹ + s·P⁻¹(AᴴA)⁻¹P⁻¹]_ii / h_ii, with h = dᴴ(I - A(AᴴA)⁻¹Aᴴ)d.
    """
    sensors, snapshots, power = 10, 200, 10.0
    bearings = np.deg2rad([-20.0, 3.0, 35.0])
    phases = np.pi * np.sin(bearings)
    steering = np.exp(1j * np.outer(np.arange(sensors), phases))
    right, errors = 0, []
    for seed in range(100):
        rng = np.random.default_rng(seed)
        feed = np.sqrt(power) * normal(rng, (snapshots, 3), "complex128") @ steering.T
        feed = feed + normal(rng, (snapshots, sensors), "complex128")
        basis = PrincipalBasis(sensors, rank=rule, dtype="complex128")
        basis.take_many(feed)
        basis.flush()
        if basis.rank == 3:
            right += 1
            errors.append(roots_of(basis.vectors, 3) - phases)
    assert right >= 99
    slope = 1j * np.arange(sensors)[:, None] * steering
    inner = np.linalg.inv(steering.conj().T @ steering)
    outside = np.eye(sensors) - steering @ inner @ steering.conj().T
    curvature = np.real(np.diag(slope.conj().T @ outside @ slope))
    factor = np.real(np.diag(np.eye(3) / power + inner / power**2))
    deviation = np.sqrt(factor / (2 * snapshots * curvature))
    # 100 runs: the standard error of a root mean square is 7 %
    np.testing.assert_allclose(np.sqrt(np.mean(np.square(errors), axis=0)), deviation, rtol=0.25)


def roots_of(vectors: np.ndarray, count: int) -> np.ndarray:
    """Return the phases of the roots nearest the unit circle of the noise-subspace polynomial."""
    n = vectors.shape[1]
    # feed rows are aᵀ(w): the signal subspace as columns is the transpose of the vectors
    noise = np.eye(n) - vectors.T @ vectors.conj()
    coefficients = np.array([np.trace(noise, offset=j) for j in range(n - 1, -n, -1)])
    roots = np.roots(coefficients)
    inside = roots[np.abs(roots) < 1]
    chosen = inside[np.argsort(-np.abs(inside))[:count]]
    return np.sort(np.angle(chosen))


def test_a_weak_source_rises_into_the_rank() -> None:
    """A source that starts late below the energies held is found once it stands out."""
    rng = np.random.default_rng(5)
    feed, rows = noisy_feed(rng, 6000, 200, 3, 0.3)
    weak = np.linalg.qr(np.vstack([rows, rng.standard_normal((1, 200))]).T)[0].T[3]
    basis = PrincipalBasis(200, max_rank=8)
    basis.take_many(feed[:2000])
    assert basis.rank == 3
    basis.take_many(feed[2000:] + rng.standard_normal((4000, 1)) * weak)
    basis.flush()
    assert basis.rank == 4
    assert principal_angles(basis.vectors, weak[None])[0] < 0.15
