"""Centre and noise of each channel, from a stretch of ordinary running.

A channel is divided by its *noise*, the part that no other channel shares, and not by its total
spread: only then is what the sources leave over white, as the rank rules and the squared
prediction error assume.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.monitor.moderation import moderated

NORMAL_MAD = 1.482602218505602
"""Standard deviation of a normal variable over its median absolute deviation."""

SEEN = 5.0
"""The farthest a nearly constant channel went in the baseline counts as so many standard
deviations: what it has done before is not news, though it does it seldom."""

ROUNDING = 64.0 * float(np.finfo(np.float64).eps)
"""A spread below this part of the centre is the rounding of a constant."""

FREEZE = 4
LEAST_FREEZE = 32
CHANCE_OF_FREEZE = 1e-9
"""A channel counts as frozen when it repeats its value four times as often as ever in the baseline,
and so many times at least that a channel that repeats four times as often as in the baseline, or
changes a quarter as often, would do so with this probability only: that is a quieter channel."""

GROSS = 8.0
"""A value is a gross outlier when it lies beyond so many robust standard deviations and beyond so
many times what 99 % of the channel's values reach: bursts of ordinary running are to be kept."""

ORDINARY_FIRSTS = 0.01
SELDOM = 4
"""First movements of constant channels are ordinary where more than this part of the samples is to
show one, as judged by the channels that moved so many times at most."""

LEAST_LEFT = 0.05
CAUTION = 3
"""A noise variance keeps the part 1 - n/m of its degrees of freedom, to this power, and so much at
least. Where channels are a factor model the power 1 would do. Real feeds are none, and on short
baselines channels that fit it badly come out too quiet: on 90 images of 64 pixels the area under
the ROC curve grows up to the power 3."""

FEW_CHANNELS = 20
"""Up to here the rank is chosen by BIC over fitted models: the eigenvalue rules need a tail of
noise eigenvalues that few channels do not give."""

FLOOR = 0.005
"""Least noise variance, as a part of the channel's variance: without one the iteration runs into
Heywood cases (a channel explained exactly) on short baselines."""

MOST_STEP = 4.0
MOST_ROUNDS = 100
SETTLED = 1e-3
"""The damped iteration: largest factor a noise variance moves by in a round, most rounds, and the
relative change at which it has settled, far below the sampling error of a noise variance."""

MOST_COVARIANCE = 768
"""Up to so many channels the covariance itself is decomposed each round; beyond, a sample of
``MOST_ROWS`` rows by way of their Gram matrix, which costs no more than that."""
MOST_ROWS = 1024


@dataclass(frozen=True, slots=True)
class Scaling:
    """What a value of each channel is measured by.

    Attributes
    ----------
    centre : ndarray of float64, shape (n,)
        Median of each channel over the baseline, in its units.
    scale : ndarray of float64, shape (n,)
        Standard deviation of the noise of each channel, in its units; positive.
    rank : int
        Directions that the channels share.
    constant, nearly : ndarray of bool, shape (n,)
        Channels that held one value all through the baseline, and those that held one value for
        half of it or more, or varied by no more than rounding.
    firsts : bool
        Whether the first movement of a constant channel is ordinary for this feed, so that only
        its size counts.
    patience : ndarray of int64, shape (n,)
        Repetitions of a value after which the channel counts as frozen.
    """

    centre: NDArray[np.float64]
    scale: NDArray[np.float64]
    rank: int
    constant: NDArray[np.bool_]
    nearly: NDArray[np.bool_]
    firsts: bool
    patience: NDArray[np.int64]


def fit_scaling(
    samples: NDArray[np.float64], *, rank: int | None = None, most: int | None = None
) -> tuple[Scaling, NDArray[np.float64], NDArray[np.bool_]]:
    """Find centre, noise and number of shared directions.

    Parameters
    ----------
    samples : ndarray of float64, shape (m, n)
        Ordinary running; NaN marks a missing value.
    rank : int, optional
        Shared directions where they are known.
    most : int, optional
        Most of them.

    Returns
    -------
    Scaling
        As described there.
    ndarray of float64, shape (m, n)
        The samples about their centre and in units of the noise, with missing values filled in
        by zero and gross outliers drawn in to eight times what the channel's 99th percentile
        reaches (or 8 robust standard deviations where that is more).
    ndarray of bool, shape (m,)
        Which samples are fit to learn from: those without gross outliers in a tenth of their
        channels, or in two.

    Notes
    -----
    Noise variances are drawn to those of the other channels where the baseline tells little of
    them: see :func:`~streambasis.monitor.moderation.moderated`.

    A constant channel has no noise to measure by. It is given a scale at the rounding of its
    value, so that any later movement is far beyond every limit. Where many channels have moved in
    a single sample of the baseline each, more such first movements are to come, with about the
    probability that a sample of the baseline showed one that stayed the only one (Good 1953):
    where that is not small, constant channels are measured by what is usual for the others.

    References
    ----------
    Good (1953), The population frequencies of species and the estimation of population
    parameters, Biometrika 40:237.
    """
    centre, spread, constant, nearly = robust_start(samples)
    deviations = np.where(np.isnan(samples), centre, samples) - centre
    reach = GROSS * np.maximum(spread, np.nanquantile(np.abs(deviations), 0.99, axis=0))
    gross = np.count_nonzero(np.abs(deviations) > reach, axis=1)
    fit = gross < max(2, samples.shape[1] // 10)
    np.clip(deviations, -reach, reach, out=deviations)
    moving = ~constant & (spread > 0)
    scale = np.where(moving, spread, spread + ROUNDING * np.abs(centre))
    scale[scale == 0.0] = np.finfo(np.float64).tiny ** 0.25
    found = 0
    firsts = _first_movements(samples, centre) > ORDINARY_FIRSTS
    if moving.any():
        z = deviations[np.ix_(fit, moving)] / spread[moving]
        noise, found = noise_variances(z, rank, most)
        scale[moving] = spread[moving] * np.sqrt(noise)
        scale[nearly] = np.maximum(scale[nearly], spread[nearly])
        freedom = np.zeros(len(scale))
        freedom[moving] = degrees_of_freedom(z)
        drawn, _ = moderated(2.0 * np.log(scale), freedom)
        told = moving | firsts
        scale[told] = np.exp(0.5 * drawn[told])
    patience = _patience(samples)
    patience[constant | nearly] = np.iinfo(np.int64).max
    shared = found if rank is None else rank
    scaling = Scaling(centre, scale, shared, constant, nearly, firsts, patience)
    deviations[:, ~moving] = 0.0
    deviations /= scale
    return scaling, deviations, fit


def _first_movements(samples: NDArray[np.float64], centre: NDArray[np.float64]) -> float:
    """Return how probable it is that a sample moves a channel for the first time.

    After Good and Turing, the part of the samples that moved a channel which no other moved;
    smoothed over channels that moved up to ``SELDOM`` times, of which k as often are one in k when
    any rate of movement is as likely; and by Laplace's rule of succession.
    """
    moved = np.count_nonzero((samples != centre) & ~np.isnan(samples), axis=0)
    once = float(moved[(moved > 0) & (moved <= SELDOM)].sum()) / SELDOM
    return (once + 1.0) / (len(samples) + 1.0)


def degrees_of_freedom(z: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return how many independent normal samples would tell each noise variance as well, (n,).

    Parameters
    ----------
    z : ndarray of float64, shape (m, n)
        Samples of channels that move.

    Notes
    -----
    The variance of m samples with kurtosis κ has the relative variance (κ - 1)/m, that of d
    normal ones 2/d. Parting noise from what n channels share takes at least n of m degrees of
    freedom; see ``CAUTION``.
    """
    m, n = z.shape
    deviations = z - z.mean(axis=0)
    deviations *= deviations
    variances = deviations.mean(axis=0)
    fourth = np.einsum("ij,ij->j", deviations, deviations) / m
    kurtosis = fourth / np.maximum(variances * variances, np.finfo(np.float64).tiny)
    left = m * max(1.0 - n / m, LEAST_LEFT ** (1.0 / CAUTION)) ** CAUTION
    return np.asarray(left * 2.0 / np.maximum(kurtosis - 1.0, 2.0))


def robust_start(
    samples: NDArray[np.float64],
) -> tuple[NDArray[Any], NDArray[Any], NDArray[np.bool_], NDArray[np.bool_]]:
    """Return median, robust standard deviation, and which channels are constant, or nearly so.

    The robust standard deviation is that of the median absolute deviation; where half of the
    samples share one value it is a fifth of the farthest deviation, and the channel counts as
    nearly constant. A channel without any value counts as constant at zero.
    """
    empty = np.isnan(samples).all(axis=0)
    held = np.where(empty, 0.0, samples) if empty.any() else samples
    centre = np.nanmedian(held, axis=0)
    away = np.abs(held - centre)
    spread = NORMAL_MAD * np.nanmedian(away, axis=0)
    constant = np.nanmax(away, axis=0) == 0.0
    nearly = (spread <= ROUNDING * np.abs(centre)) & ~constant
    if nearly.any():
        spread[nearly] = np.nanmax(away[:, nearly], axis=0) / SEEN
    spread[spread <= ROUNDING * np.abs(centre)] = 0.0
    return centre, spread, constant, nearly


def _patience(samples: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return after how many repetitions of its value each channel counts as frozen, (n,)."""
    often = np.mean(samples[1:] == samples[:-1], axis=0)
    often = np.minimum(FREEZE * often, 1.0 - (1.0 - often) / FREEZE)
    often = np.clip(often, 1e-300, 1.0 - 1e-6)
    chance = np.ceil(math.log(CHANCE_OF_FREEZE) / np.log(often)).astype(np.int64)
    runs = FREEZE * longest_runs(samples)
    return np.asarray(np.maximum(np.maximum(LEAST_FREEZE, chance), runs))


def longest_runs(samples: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return how many times each channel, at most, repeated its value without a break, (n,).

    Examples
    --------
    >>> import numpy as np
    >>> longest_runs(np.array([[1.0, 2.0], [1.0, 3.0], [1.0, 3.0], [2.0, np.nan]]))
    array([2, 1])
    """
    longest = np.zeros(samples.shape[1], np.int64)
    current = np.zeros(samples.shape[1], np.int64)
    for same in samples[1:] == samples[:-1]:
        current = np.where(same, current + 1, 0)
        np.maximum(longest, current, out=longest)
    return longest


def most_directions(channels: int) -> int:
    """Return Ledermann's bound: the most shared directions that ``channels`` channels identify.

    References
    ----------
    Ledermann (1937), On the rank of the reduced correlational matrix in multiple-factor
    analysis, Psychometrika 2:85.

    Examples
    --------
    >>> [most_directions(n) for n in (1, 3, 6, 10, 30)]
    [0, 1, 3, 6, 22]
    """
    return max(0, math.floor(channels + 0.5 - math.sqrt(2.0 * channels + 0.25) + 1e-9))


def noise_variances(
    z: NDArray[np.float64], rank: int | None = None, most: int | None = None
) -> tuple[NDArray[np.float64], int]:
    """Split the variance of each channel into what it shares and what is its own.

    Parameters
    ----------
    z : ndarray of float64, shape (m, n)
        Samples, each channel roughly of unit spread about zero.
    rank : int, optional
        Number of shared directions, when it is not to be chosen.
    most : int, optional
        Most shared directions; never beyond Ledermann's bound.

    Returns
    -------
    ndarray of float64, shape (n,)
        Noise variance of each channel.
    int
        Number of shared directions.

    Notes
    -----
    Principal-axis factor analysis. The start is the variance of each channel given all others
    (Guttman 1956). Each round scales the covariance by the noise, keeps the directions that the
    rank rule takes, and gives each channel what they leave of its variance, moved by a factor of
    4 at most and kept above a floor. The rule is MDL in each round, or for at most 20 channels
    BIC over the fitted models. A round costs an eigendecomposition, O(n³), or O(min(m, 1024)²·n)
    beyond 768 channels.

    References
    ----------
    Guttman (1956), Best possible systematic estimates of communalities, Psychometrika 21:273;
    Harman (1976), Modern Factor Analysis, chapter 8; Wax & Kailath (1985), Detection of signals
    by information theoretic criteria, IEEE Trans. ASSP 33:387.
    """
    spectrum = _Spectrum(z)
    bound = most_directions(z.shape[1])
    if z.shape[1] > MOST_COVARIANCE:
        bound = min(bound, spectrum.rows // 4)
    if most is not None:
        bound = min(bound, most)
    start = spectrum.alone()
    if rank is not None:
        return spectrum.settle(start, min(rank, bound), bound), min(rank, bound)
    if z.shape[1] > FEW_CHANNELS:
        return spectrum.settle(start, None, bound), spectrum.rank
    best = (math.inf, start, 0)
    for r in range(bound + 1):
        variances = spectrum.settle(start, r, bound)
        best = min(best, (spectrum.bic(variances, r), variances, r), key=lambda fit: fit[0])
    return best[1], best[2]


def mdl_rank(energies: NDArray[np.float64], samples: int, bound: int) -> int:
    """Return the number of directions above white noise by minimum description length.

    Parameters
    ----------
    energies : ndarray of float64, shape (n,)
        Eigenvalues of a covariance of real data, descending.
    samples : int
        Samples it was taken over.
    bound : int
        Most directions.

    Notes
    -----
    Wax & Kailath (1985) in the form for real data: k(2n - k + 1)/2 free parameters.
    """
    n = energies.size
    values = np.maximum(energies, np.finfo(np.float64).tiny)
    k = np.arange(min(bound, n - 1) + 1)
    sums = np.cumsum(values[::-1])[::-1][k]
    logs = np.cumsum(np.log(values[::-1]))[::-1][k]
    left = n - k
    cost = 0.5 * samples * (left * np.log(sums / left) - logs)
    return int(np.argmin(cost + 0.25 * k * (2 * n - k + 1) * math.log(samples)))


class _Spectrum:
    """Eigenvalues of a covariance scaled by changing noise variances."""

    def __init__(self, z: NDArray[np.float64]) -> None:
        z = z - z.mean(axis=0)
        if z.shape[1] > MOST_COVARIANCE and z.shape[0] > MOST_ROWS:
            z = z[:: -(-z.shape[0] // MOST_ROWS)]
        self.rows, self.channels = z.shape
        self.rank = 0
        self.total = np.einsum("ij,ij->j", z, z) / self.rows
        self.data = z
        self.wide = self.channels > MOST_COVARIANCE or self.channels > self.rows
        self.covariance = None if self.wide else z.T @ z / self.rows

    def alone(self) -> NDArray[np.float64]:
        """Return the variance of each channel given all others, with a ridge on short data."""
        ridge = self.channels / self.rows
        spread = np.sqrt(self.total)
        if self.covariance is not None:
            shared = self.covariance / np.outer(spread, spread)
            shared[np.diag_indices_from(shared)] += ridge
            given = 1.0 / np.diag(np.linalg.inv(shared))
        else:
            # Woodbury: the inverse of ridge·I + AᵀA by the Gram matrix of the rows
            rows = self.data / (spread * math.sqrt(self.rows))
            gram = rows @ rows.T
            gram[np.diag_indices_from(gram)] += ridge
            given = ridge / (1.0 - np.einsum("ij,ij->j", rows, np.linalg.solve(gram, rows)))
        return np.asarray(self.total * np.clip(given, FLOOR, 1.0))

    def axes(
        self, variances: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return eigenvalues, descending, and eigenvectors as rows, in noise units."""
        inverse = 1.0 / np.sqrt(variances)
        if self.covariance is not None:
            values, columns = np.linalg.eigh(self.covariance * np.outer(inverse, inverse))
            return values[::-1], columns.T[::-1]
        rows = self.data * (inverse / math.sqrt(self.rows))
        values, columns = np.linalg.eigh(rows @ rows.T)
        values, columns = values[::-1], columns.T[::-1]
        keep = values > values[0] * self.rows * np.finfo(np.float64).eps
        values, columns = values[keep], columns[keep]
        return values, columns @ rows / np.sqrt(values)[:, None]

    def choose(self, values: NDArray[np.float64], bound: int) -> int:
        """Return how many directions stand out of noise of unit variance."""
        if self.rows > 2 * self.channels:
            return mdl_rank(values, self.rows, bound)
        # with fewer samples the noise eigenvalues reach the Marchenko-Pastur edge, and MDL,
        # which takes them for equal, has no answer
        edge = (1.0 + math.sqrt(self.channels / self.rows)) ** 2
        return min(bound, int(np.sum(values > 1.1 * edge)))

    def settle(
        self, start: NDArray[np.float64], rank: int | None, bound: int
    ) -> NDArray[np.float64]:
        """Iterate the noise variances until they stay, at a fixed or a chosen rank."""
        variances = start
        for _ in range(MOST_ROUNDS):
            values, axes = self.axes(variances)
            self.rank = self.choose(values, bound) if rank is None else rank
            carried = np.maximum(values[: self.rank] - 1.0, 0.0) @ axes[: self.rank] ** 2
            new = np.clip(
                self.total - variances * carried, variances / MOST_STEP, variances * MOST_STEP
            )
            new = np.maximum(new, FLOOR * self.total)
            moved = float(np.max(np.abs(np.log(new / variances))))
            variances = new
            if moved < SETTLED:
                break
        return variances

    def bic(self, variances: NDArray[np.float64], rank: int) -> float:
        """Return Schwarz's criterion of the fitted model; smaller is better."""
        values, _ = self.axes(variances)
        # the model's eigenvalues in noise units are the first ``rank`` and ones
        first, rest = np.maximum(values[:rank], 1.0), values[rank:]
        misfit = np.log(first).sum() + np.log(variances).sum()
        misfit += (values[:rank] / first).sum() + rest.sum()
        n = self.channels
        free = n * (rank + 1) - rank * (rank - 1) / 2
        return float(self.rows * misfit + free * math.log(self.rows))
