"""Control limits of the squared prediction error and of Hotelling's T²."""

from __future__ import annotations

import math
import warnings
from statistics import NormalDist
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.monitor.calm import Calm
from streambasis.monitor.quantiles import chi2_quantile, f_quantile
from streambasis.state import State, owned

METHODS = ("tail", "box", "jackson-mudholkar")

KEPT = 1024
"""Most excesses kept for the tail. Half as many are enough for a shape within 0.05; the pool is
thinned to that half when it is full."""

TAIL_PART = 0.1
"""Part of the baseline that counts as tail at first. As samples come in the part falls, down to
``REACH`` times the false-alarm probability."""
REACH = 10.0

REFIT = 1.1
"""The tail is fitted again when the pool has grown by a tenth."""

MOST_UNCERTAIN = 2.0
"""Most variance of the logarithm of the rate that is allowed for."""


def box_limit(mean: float, variance: float, false_alarm: float) -> float:
    """Return Box's limit, that of g·χ²_h with the mean and the variance given.

    References
    ----------
    Box (1954), Some theorems on quadratic forms applied in the study of analysis of variance
    problems, I, Annals of Mathematical Statistics 25:290.

    Examples
    --------
    >>> round(box_limit(5.0, 10.0, 0.05), 4)
    11.0705
    """
    if variance <= 0.0 or mean <= 0.0:
        return mean
    weight, freedom = variance / (2.0 * mean), 2.0 * mean * mean / variance
    return weight * chi2_quantile(false_alarm, freedom)


def jackson_mudholkar_limit(roots: ArrayLike, false_alarm: float) -> float | None:
    """Return the limit of Jackson & Mudholkar, or None where it breaks down.

    Parameters
    ----------
    roots : array_like
        Eigenvalues of the covariance that the basis leaves out.
    false_alarm : float
        False-alarm probability.

    Returns
    -------
    float or None
        None when h0 is not positive: the power transform to normality does not exist then.

    References
    ----------
    Jackson & Mudholkar (1979), Control procedures for residuals associated with principal
    component analysis, Technometrics 21:341.

    Examples
    --------
    >>> round(jackson_mudholkar_limit([29.33, 16.42], 0.05), 2)
    140.44
    """
    values = np.asarray(roots, float)
    first, second, third = (float(np.sum(values**k)) for k in (1, 2, 3))
    if second <= 0.0:
        return first
    power = 1.0 - 2.0 * first * third / (3.0 * second * second)
    if power <= 0.0:
        return None
    z = NormalDist().inv_cdf(1.0 - false_alarm)
    inner = (
        z * math.sqrt(2.0 * second * power * power) / first
        + 1.0
        + second * power * (power - 1.0) / (first * first)
    )
    return float(first * inner ** (1.0 / power)) if inner > 0.0 else None


def t2_limit(rank: int, count: float, false_alarm: float) -> float:
    """Return the limit of Hotelling's T² for new samples.

    Parameters
    ----------
    rank : int
        Directions p.
    count : float
        Samples n that mean and energies were estimated from.
    false_alarm : float
        False-alarm probability.

    Returns
    -------
    float
        p(n+1)(n-1) / (n(n-p)) · F(p, n-p); infinity where n <= p.

    References
    ----------
    Tracy, Young & Mason (1992), Multivariate control charts for individual observations,
    Journal of Quality Technology 24:88.

    Examples
    --------
    >>> round(t2_limit(2, 15, 0.05), 3)
    8.743
    """
    if rank == 0 or count <= rank:
        return math.inf
    factor = rank * (count + 1.0) * (count - 1.0) / (count * (count - rank))
    return factor * f_quantile(false_alarm, rank, count - rank)


def pareto_fit(excesses: NDArray[np.float64]) -> tuple[float, float]:
    """Fit a generalized Pareto distribution by probability-weighted moments.

    Parameters
    ----------
    excesses : ndarray of float64, shape (k,)
        Amounts by which values exceed a threshold, at least two of them.

    Returns
    -------
    shape, scale : float
        Shape is positive for a tail heavier than exponential.

    References
    ----------
    Hosking & Wallis (1987), Parameter and quantile estimation for the generalized Pareto
    distribution, Technometrics 29:339; plotting positions (i - 0.35)/k as recommended there.
    """
    x = np.sort(excesses)
    k = x.size
    weights = 1.0 - (np.arange(1, k + 1) - 0.35) / k
    mean, weighted = float(x.mean()), float((x * weights).mean())
    gap = mean - 2.0 * weighted
    if gap <= 0.0:
        return 0.0, mean
    return 2.0 - mean / gap, 2.0 * mean * weighted / gap


def _uncertainty(depth: float, excesses: int) -> float:
    """Return the variance of the logarithm of the rate at which a fitted limit is exceeded.

    From the asymptotic covariance of the two estimates (Hosking & Wallis 1987, section 3) at shape
    zero, for a limit ``depth`` natural logarithms beyond the threshold. A rate that scatters
    log-normally by this variance about the one requested is larger on average, by the exponential
    of half of it: the limit is set for a rate that is so much smaller.
    """
    return max(0.0, (7.0 - 4.0 * depth + depth**2) * depth**2 / (3.0 * excesses))


class SpeLimit:
    """The control limit of the squared prediction error, refined by what comes in.

    Parameters
    ----------
    method : {"tail", "box", "jackson-mudholkar"}
        How the limit follows from the values; ``"jackson-mudholkar"`` from the eigenvalues that
        the basis leaves out, in proportion to the running mean of the values.
    false_alarm : float
        Probability with which an ordinary sample exceeds the limit.
    memory : float
        Samples after which the older half begins to fade; infinity for none.

    Attributes
    ----------
    value : float
        The limit.
    mean : float
        Mean of the values so far.
    calm : Calm
        Tells which values belong to ordinary stretches.

    Notes
    -----
    For the tail, the values above a threshold are kept. When ``KEPT`` are held, the threshold is
    raised to their median, so that the tail is fitted ever further out; once only ``REACH`` times
    the false-alarm probability is left above it, or the memory is full, the older half of the
    excesses and of the count goes instead. The relative error of the rate is about 0.07 at 1e-3
    and 0.2 at 1e-4 after 200,000 samples; right after 5,000 baseline samples a limit for 1e-4 is
    an extrapolation by a factor of 50 beyond the data, and the rate is uncertain by a factor of 3.
    Values outside events are to be given whether they exceed the limit or not: without the lone
    exceedances it would creep down. Those of stretches that are raised all along are not to be
    given (``calm``): it would creep up.
    """

    def __init__(self, method: str, false_alarm: float, memory: float = math.inf) -> None:
        self.method: Final = method
        self.false_alarm: Final = false_alarm
        self.memory: Final = memory
        self.value = math.inf
        self.count = 0.0
        self._threshold = math.inf
        self._excesses = np.zeros(0)
        self._fitted = 0
        self.mean = 0.0
        self._squares = 0.0
        self._roots = np.zeros(0)
        self.calm = Calm(0.0, math.inf, 0.0, math.inf)

    def start(self, values: NDArray[np.float64], roots: NDArray[np.float64]) -> None:
        """Begin with values that the basis was not fitted on, in order of time.

        Parameters
        ----------
        values : ndarray of float64, shape (m,)
            Squared prediction errors of the baseline.
        roots : ndarray of float64
            Eigenvalues of the baseline's covariance that the basis leaves out.
        """
        self._roots = roots
        part = min(0.5, max(TAIL_PART, REACH * self.false_alarm))
        self._threshold = float(np.quantile(values, 1.0 - part))
        self.calm = Calm.learn(values, self.memory)
        self.take(values)
        self.fit()

    def take(self, values: NDArray[np.float64]) -> None:
        """Take values from outside events, in order of time, and refit the limit when due."""
        if not values.size:
            return
        self.count += values.size
        weight = values.size / self.count
        self._squares += weight * (float(np.mean(values * values)) - self._squares)
        self.mean += weight * (float(values.mean()) - self.mean)
        above = values[values > self._threshold]
        if above.size:
            self._excesses = np.concatenate([self._excesses, above])
        while self._excesses.size > KEPT or self.count > self.memory:
            self._thin()
        if self.method != "tail" or not (
            self._fitted / REFIT < self._excesses.size < self._fitted * REFIT
        ):
            self.fit()

    def _thin(self) -> None:
        held = self._excesses.size
        far = KEPT / 2.0 / self.count < REACH * self.false_alarm
        if self.count <= self.memory and not far:
            self._threshold = float(np.median(self._excesses))
            self._excesses = self._excesses[self._excesses > self._threshold]
            if self._excesses.size < held:
                return
        self._excesses = self._excesses[held // 2 :]
        self.count /= 2.0

    def fit(self) -> None:
        """Set the limit from what is held."""
        held = self._excesses.size
        self._fitted = held
        if self.method == "box":
            self.value = self._box()
        elif self.method == "jackson-mudholkar":
            self.value = self._jackson_mudholkar()
        elif held >= 2:
            shape, scale = pareto_fit(self._excesses - self._threshold)
            depth = math.log(held / self.count / self.false_alarm)
            depth += 0.5 * min(_uncertainty(depth, held), MOST_UNCERTAIN)
            beyond = depth if abs(shape) < 1e-9 else math.expm1(shape * depth) / shape
            self.value = self._threshold + scale * beyond
        else:
            self.value = self._box()

    def _box(self) -> float:
        return box_limit(self.mean, self._squares - self.mean**2, self.false_alarm)

    def _jackson_mudholkar(self) -> float:
        total = float(self._roots.sum())
        if total > 0.0:
            limit = jackson_mudholkar_limit(self._roots * (self.mean / total), self.false_alarm)
            if limit is not None:
                return limit
        warnings.warn(
            "the Jackson-Mudholkar limit does not exist for this residual spectrum (h0 <= 0); "
            "Box's limit is used instead: choose limits='tail' or limits='box'",
            RuntimeWarning,
            stacklevel=2,
        )
        return self._box()

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        facts: dict[str, Any] = {
            "method": self.method,
            "false_alarm": self.false_alarm,
            "memory": None if math.isinf(self.memory) else self.memory,
            "value": self.value,
            "taken": self.count,
            "threshold": self._threshold,
            "fitted": self._fitted,
            "mean": self.mean,
            "squares": self._squares,
            "calm": self.calm.to_facts(),
        }
        return State(
            "SpeLimit", facts, {"excesses": owned(self._excesses), "roots": owned(self._roots)}
        )

    @classmethod
    def from_state(cls, state: State) -> SpeLimit:
        """Build a limit that goes on where the state was taken."""
        facts = state.facts
        memory = math.inf if facts["memory"] is None else facts["memory"]
        limit = cls(facts["method"], facts["false_alarm"], memory)
        older = "count" in facts
        limit.value, limit.count = facts["value"], facts["count" if older else "taken"]
        limit._threshold, limit._fitted = facts["threshold"], facts["fitted"]
        limit.mean, limit._squares = facts["mean"], facts["squares"]
        if not older:  # in older snapshots every stretch counted as calm
            limit.calm = Calm(*facts["calm"])
        limit._excesses = state.take("excesses", np.float64, (None,), finite=True)
        limit._roots = state.take("roots", np.float64, (None,), finite=True)
        return limit
