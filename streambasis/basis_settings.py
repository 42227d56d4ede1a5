"""The settings of a StreamBasis, checked and completed."""

from __future__ import annotations

from dataclasses import dataclass
from operator import index
from typing import Any, Self

import numpy as np

from streambasis.errors import SettingError
from streambasis.kernels import growth as kernels
from streambasis.times import span_nanoseconds

POLICIES = {
    "criterion": kernels.CRITERION,
    "never": kernels.NEVER,
    "always": kernels.ALWAYS,
}


@dataclass(frozen=True, slots=True)
class Settings:
    """What a basis was asked to do.

    Attributes
    ----------
    capacity : int
        Most directions kept.
    rtol, atol : float
        The tolerance of a sample is ``max(atol, rtol·|sample|)``.
    policy : int
        Reorthogonalization policy of :mod:`streambasis.kernels.growth`.
    window : int or None
        Samples kept; None where their number is not limited.
    span : int or None
        Nanoseconds kept; None where time is not limited.
    """

    capacity: int
    rtol: float
    atol: float
    policy: int
    window: int | None
    span: int | None

    @classmethod
    def checked(
        cls,
        count: int,
        dtype: np.dtype[Any],
        *,
        rtol: Any,
        atol: Any,
        capacity: Any,
        window: Any,
        span: Any,
        reorthogonalize: Any,
    ) -> Self:
        """Return the settings for ``count`` channels, or raise SettingError."""
        if reorthogonalize not in POLICIES:
            raise SettingError(f"reorthogonalize={reorthogonalize!r}: one of {', '.join(POLICIES)}")
        kept = None if window is None else _checked_window(window)
        relative, absolute = _checked_tolerances(rtol, atol, float(np.finfo(dtype).eps))
        return cls(
            capacity=_checked_capacity(capacity, count, kept),
            rtol=relative,
            atol=absolute,
            policy=POLICIES[reorthogonalize],
            window=kept,
            span=None if span is None else span_nanoseconds(span),
        )

    @property
    def forgets(self) -> bool:
        """Whether samples leave again."""
        return self.window is not None or self.span is not None


def _checked_window(window: Any) -> int:
    try:
        number = index(window)
    except TypeError:
        number = 0
    if not 1 <= number < 2**62 or isinstance(window, bool):
        raise SettingError(f"window={window!r}: a whole number of samples, from 1 to below 2**62")
    return number


def _checked_capacity(capacity: int | None, count: int, window: int | None) -> int:
    if capacity is None:
        return count if window is None else min(count, window)
    try:
        number = index(capacity)
    except TypeError:
        number = 0
    if not 1 <= number <= count:
        raise SettingError(
            f"capacity={capacity!r}: a whole number from 1 to the number of channels ({count})"
        )
    return number


def _checked_tolerances(rtol: Any, atol: Any, epsilon: float) -> tuple[float, float]:
    try:
        relative = epsilon**0.5 if rtol is None else float(rtol)
        absolute = float(atol)
    except (TypeError, ValueError):
        raise SettingError(f"rtol={rtol!r}, atol={atol!r}: tolerances are numbers") from None
    if not 0.0 <= relative < 1.0:
        raise SettingError(f"rtol={rtol}: a relative tolerance is at least 0 and below 1")
    if not 0.0 <= absolute < np.inf:
        raise SettingError(f"atol={atol}: an absolute tolerance is at least 0 and finite")
    return relative, absolute
