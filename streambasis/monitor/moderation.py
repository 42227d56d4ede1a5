"""Variances of single channels, drawn to those of the others where few samples tell them.

A variance that few samples tell is as often far too small as too large, and of many channels the
ones that came out too small make most of the false alarms. The variances of all channels say how
far apart variances of this feed are: that is the prior of each (empirical Bayes).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

LEAST_CHANNELS = 4
"""Fewer channels do not show how far apart the variances of a feed are."""

FARTHEST = 100.0
"""A channel is drawn to a variance this many times its own at most: channels in different units
lie any number of powers of ten apart, and say nothing about one another."""

CLOSEST = 0.1
"""Least variance of the logarithm that true variances are taken to have between channels."""


def moderated(
    logs: NDArray[np.float64], freedom: NDArray[np.float64]
) -> tuple[NDArray[np.float64], float]:
    """Draw variances to what the others have, the more the fewer degrees of freedom they have.

    Parameters
    ----------
    logs : ndarray of float64, shape (n,)
        Logarithms of the variances estimated, so that no unit is too large or small; any number
        where ``freedom`` is 0.
    freedom : ndarray of float64, shape (n,)
        Degrees of freedom of each; 0 for a channel of which nothing is known.

    Returns
    -------
    ndarray of float64, shape (n,)
        Logarithm of (d₀·s₀² + d·s²)/(d₀ + d), with s₀² taken for 100·s² at most; log s₀² where
        nothing is known.
    float
        d₀, the degrees of freedom that the other channels are worth; 0 for too few channels.

    Notes
    -----
    True variances are taken to follow s₀²·d₀/χ²(d₀). Estimates then have
    E log s² = log s₀² - ψ(d₀/2) + log(d₀/2) + ψ(d/2) - log(d/2) and
    var log s² = ψ'(d/2) + ψ'(d₀/2), ψ being the digamma function; both are matched, each channel
    weighted by its degrees of freedom. Channels in unlike units give a small d₀, and stay as they
    are. In a common unit, a factor on all channels is a factor on the result.

    References
    ----------
    Smyth (2004), Linear models and empirical Bayes methods for assessing differential expression
    in microarray experiments, Statistical Applications in Genetics and Molecular Biology 3(1):3,
    section 6.

    Examples
    --------
    >>> import numpy as np
    >>> variances, freedom = np.array([1.0, 2, 3, 4, 0.01]), np.array([40.0, 40, 40, 40, 1])
    >>> np.exp(moderated(np.log(variances), freedom)[0]).round(2)
    array([1.15, 1.99, 2.83, 3.66, 0.89])
    """
    told = freedom > 0.0
    if np.count_nonzero(told) < LEAST_CHANNELS:
        usual = float(logs[told].mean()) if told.any() else 0.0
        return np.where(told, logs, usual), 0.0
    halves = np.maximum(freedom[told], 1.0) / 2.0
    weights = halves / halves.sum()
    own = [(digamma(h) - math.log(h), trigamma(h)) for h in halves.tolist()]
    bias, spread = np.array(own).T
    unbiased = logs[told] - bias
    mean = float(weights @ unbiased)
    between = float(weights @ ((unbiased - mean) ** 2 - spread))
    half = inverse_trigamma(max(between, CLOSEST))
    prior, usual = 2.0 * half, mean + digamma(half) - math.log(half)
    pull = np.exp(np.minimum(usual - logs, math.log(FARTHEST)))
    drawn = logs + np.log((prior * pull + freedom) / (prior + freedom))
    return np.where(told, drawn, usual), prior


def digamma(x: float) -> float:
    """Return the derivative of log Γ at a positive number.

    Upwards recurrence to 10, then the asymptotic series (Abramowitz & Stegun 1964, 6.3.5 and
    6.3.18); error below 1e-13.

    Examples
    --------
    >>> round(digamma(1.0), 12)
    -0.577215664902
    """
    below = 0.0
    while x < 10.0:
        below -= 1.0 / x
        x += 1.0
    y = 1.0 / (x * x)
    series = y * (1 / 12 - y * (1 / 120 - y * (1 / 252 - y * (1 / 240 - y / 132))))
    return below + math.log(x) - 0.5 / x - series


def trigamma(x: float) -> float:
    """Return the second derivative of log Γ at a positive number.

    As :func:`digamma` (Abramowitz & Stegun 1964, 6.4.6 and 6.4.12).

    Examples
    --------
    >>> round(trigamma(1.0) - math.pi**2 / 6, 12)
    0.0
    """
    above = 0.0
    while x < 10.0:
        above += 1.0 / (x * x)
        x += 1.0
    y = 1.0 / (x * x)
    series = y * (1 / 6 - y * (1 / 30 - y * (1 / 42 - y * (1 / 30 - y * 5 / 66))))
    return above + 1.0 / x + 0.5 * y + series / x


def inverse_trigamma(value: float) -> float:
    """Return the positive number at which :func:`trigamma` takes a positive value.

    Bisection on the logarithm between bounds of the function, 1/x and 1/x + 1/x².

    Examples
    --------
    >>> round(inverse_trigamma(trigamma(2.5)), 9)
    2.5
    """
    low, high = 1.0 / value, (1.0 + math.sqrt(1.0 + 4.0 * value)) / (2.0 * value)
    for _ in range(60):
        middle = math.sqrt(low * high)
        if trigamma(middle) > value:
            low = middle
        else:
            high = middle
    return math.sqrt(low * high)
