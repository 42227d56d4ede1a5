"""How many directions rise above the noise: the rank rules, and the noise variance they rest on.

All of them read a spectrum: the energies held (variance along each direction, descending) and the
variance that lies outside those directions, summed over all of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Spectrum:
    """What the rank rules know of a feed.

    Attributes
    ----------
    energies : ndarray of float64, shape (k,)
        Variance along each direction held, descending.
    outside : float
        Variance outside them, summed over the other ``dimension - k`` directions.
    dimension : int
        Number of channels n.
    samples : float
        Effective number of samples N: (Σw)²/Σw² of the sample weights, less one where a mean was
        estimated.
    complex_data : bool
        Whether the samples are complex.
    """

    energies: NDArray[np.float64]
    outside: float
    dimension: int
    samples: float
    complex_data: bool

    def noise(self, rank: int) -> float:
        """Return the variance per residual dimension when ``rank`` directions are signal.

        Notes
        -----
        The leading directions absorb noise: each is free to turn towards it, so that the residual
        keeps (N - rank)(n - rank) of the N·(n - rank) noise terms. The sum is divided by that
        many. 0 where nothing is left to estimate it from.
        """
        free = (self.dimension - rank) * (1.0 - rank / self.samples) if self.samples else 0.0
        total = float(self.energies[rank:].sum()) + self.outside
        return total / free if free > 0.0 else 0.0


def optimal_threshold(aspect: float) -> float:
    """Return the optimal hard threshold for singular values in white noise.

    Parameters
    ----------
    aspect : float
        Smaller over larger dimension of the data matrix, in (0, 1].

    Returns
    -------
    float
        λ* such that singular values above λ*·√(larger dimension)·(noise standard deviation) are
        kept.

    References
    ----------
    M. Gavish and D. L. Donoho (2014), The optimal hard threshold for singular values is 4/√3,
    IEEE Trans. Information Theory 60, equation 11.

    Examples
    --------
    >>> round(optimal_threshold(1.0), 4)
    2.3094
    """
    return math.sqrt(
        2 * (aspect + 1) + 8 * aspect / ((aspect + 1) + math.sqrt(aspect**2 + 14 * aspect + 1))
    )


def rank_by_noise(spectrum: Spectrum, most: int) -> int:
    """Return how many energies exceed the optimal hard threshold of Gavish & Donoho (2014).

    Notes
    -----
    The threshold needs the noise variance and the noise variance needs the rank: start from the
    largest rank that leaves a residual to estimate the noise from, and repeat until the rank no
    longer falls. The rank never rises on the way (a smaller rank has the larger noise estimate),
    so this ends after at most ``most`` rounds.
    """
    energies, samples = spectrum.energies, spectrum.samples
    n = spectrum.dimension
    if samples <= 1.0:
        return 0
    rank = min(most, len(energies), n - 1 if n > 1 else 1, math.ceil(samples) - 1)
    aspect = min(n, samples) / max(n, samples)
    # energies are squared singular values over N, so the threshold is λ*²·max(n, N)/N
    factor = optimal_threshold(aspect) ** 2 * max(n / samples, 1.0)
    while True:
        threshold = factor * spectrum.noise(rank)
        found = int(np.count_nonzero(energies[:rank] > threshold))
        if found == rank:
            return rank
        rank = found


def rank_by_mdl(spectrum: Spectrum, most: int) -> int:
    """Return the number of signals of minimum description length.

    Notes
    -----
    For complex data MDL(k) = N·(n-k)·log(a/g) + k(2n-k)/2·log N with a and g the arithmetic and
    geometric mean of the n - k smallest energies, the form published. For real data the
    likelihood has half the exponent and the eigenvectors half the parameters:
    MDL(k) = N/2·(n-k)·log(a/g) + k(2n-k+1)/4·log N. Energies that are not held enter g by a
    factor that is the same for every k, so only their sum is needed.

    References
    ----------
    M. Wax and T. Kailath (1985), Detection of signals by information theoretic criteria, IEEE
    Trans. Acoustics, Speech, and Signal Processing 33, equation 17.
    """
    return int(np.argmin(description_lengths(spectrum)[: most + 1]))


def description_lengths(spectrum: Spectrum) -> NDArray[np.float64]:
    """Return MDL(k) for k = 0, 1, ... up to a constant, as :func:`rank_by_mdl` defines it.

    Where nothing at all lies beyond the first k directions the noise has no variance and the
    length is minus infinity. With fewer samples than channels, where that would be so by count
    alone, samples and channels change roles: the spectrum does not tell them apart.
    """
    energies, n, samples = spectrum.energies, spectrum.dimension, spectrum.samples
    held = len(energies)
    if spectrum.outside == 0.0 and int(samples) <= held < n:
        n, samples = held, float(n)
    if samples <= 1.0 or not held:
        return np.zeros(1)
    k = np.arange(min(held, n - 1) + 1)
    beyond = np.append(np.cumsum(energies[::-1])[::-1], 0.0)[: len(k)] + spectrum.outside
    logs = np.append(np.cumsum(np.log(energies)[::-1])[::-1], 0.0)[: len(k)]
    lengths: NDArray[np.float64]
    with np.errstate(divide="ignore"):
        likelihood = samples * ((n - k) * np.log(beyond / (n - k)) - logs)
    if spectrum.complex_data:
        lengths = likelihood + 0.5 * k * (2 * n - k) * math.log(samples)
    else:
        lengths = 0.5 * likelihood + 0.25 * k * (2 * n - k + 1) * math.log(samples)
    return lengths
