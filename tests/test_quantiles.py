"""Quantiles of the monitor against SciPy and mpmath over a wide grid."""

from __future__ import annotations

import mpmath
import pytest
from scipy import stats

from streambasis.monitor.quantiles import chi2_quantile, chi2_tail, f_quantile, f_tail

TAILS = (0.9, 0.5, 0.1, 1e-2, 1e-4, 1e-6, 1e-9)


@pytest.mark.parametrize("freedom", [0.3, 1, 2, 5, 20.5, 100, 252, 1000, 9990])
def test_chi2_quantiles_agree_with_scipy(freedom: float) -> None:
    """Upper quantiles of chi-squared agree from a fraction of a degree to 10,000."""
    for tail in TAILS:
        assert chi2_quantile(tail, freedom) == pytest.approx(
            stats.chi2.isf(tail, freedom), rel=1e-12
        )


@pytest.mark.parametrize("above", [1, 8, 100])
@pytest.mark.parametrize(("below", "close"), [(3, 1e-13), (20, 1e-13), (2000, 1e-11), (1e6, 1e-8)])
def test_f_quantiles_have_the_tail_requested(above: float, below: float, close: float) -> None:
    """The tail beyond a quantile of F, by mpmath, is the one asked for.

    Many degrees of freedom cost digits, as documented. SciPy's own quantiles are off by 3e-8 at a
    tail of 1e-9 and serve as a check of the rest only.
    """
    for tail in TAILS:
        found = f_quantile(tail, above, below)
        with mpmath.workdps(30):
            rest = mpmath.mpf(below) / (above * mpmath.mpf(found) + below)
            wanted = mpmath.betainc(below / 2, above / 2, 0, rest, regularized=True)
        assert float(wanted) == pytest.approx(tail, rel=close)
        if tail > 1e-5:
            assert found == pytest.approx(stats.f.isf(tail, above, below), rel=1e-8)


def test_deep_tails_agree_with_mpmath() -> None:
    """Tail probabilities as small as 1e-40 keep their digits."""
    with mpmath.workdps(40):
        wanted = mpmath.gammainc(5, 100, regularized=True)
        assert chi2_tail(200.0, 10) == pytest.approx(float(wanted), rel=1e-12)
        part = mpmath.mpf(2 * 30) / (2 * 30 + 50)
        wanted = mpmath.betainc(1, 25, part, 1, regularized=True)
        assert f_tail(30.0, 2, 50) == pytest.approx(float(wanted), rel=1e-12)


def test_nothing_is_below_zero() -> None:
    """Both variables are positive: they exceed zero and anything below it with certainty."""
    assert chi2_tail(0.0, 3) == chi2_tail(-1.0, 3) == f_tail(-2.0, 3, 4) == 1.0
