"""Compile what a process will need before it says that it is ready."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import DTypeLike

from streambasis.basis import StreamBasis
from streambasis.errors import SettingError
from streambasis.kernels.plain import to_rows
from streambasis.monitor import NoveltyMonitor
from streambasis.principal import PrincipalBasis
from streambasis.principal_settings import WHOLE
from streambasis.samples import checked_dtype

BASELINE = 60
"""Samples of the baseline of the monitor that is run once."""
WIDE = WHOLE + 6
"""Channels of a principal basis that does not hold every direction."""


def warm_up(*what: Any, dtypes: Iterable[DTypeLike] = ("float64",)) -> None:
    """Compile, or load from disk, the kernels of what a process is going to use.

    Parameters
    ----------
    *what : class or object
        Of :class:`StreamBasis`, :class:`PrincipalBasis`, :class:`NoveltyMonitor`: classes, or
        objects, which stay as they are; all three where nothing is named.
    dtypes : iterable of dtype
        Types of the samples to come, for the classes; an object is warmed up for its own.

    Raises
    ------
    SettingError
        For anything else.

    Notes
    -----
    Some seconds for each dtype when nothing has been compiled on this machine, a tenth of a second
    otherwise. Without it the first object of each kind waits that long.

    Examples
    --------
    >>> import streambasis
    >>> streambasis.warm_up(streambasis.StreamBasis)
    """
    kinds = [checked_dtype(dtype) for dtype in dtypes]
    for item in what or (StreamBasis, PrincipalBasis, NoveltyMonitor):
        kind = item if isinstance(item, type) else type(item)
        if kind not in (StreamBasis, PrincipalBasis, NoveltyMonitor):
            raise SettingError(
                f"{item!r}: warm_up takes StreamBasis, PrincipalBasis, NoveltyMonitor or objects "
                "of these"
            )
        if kind is NoveltyMonitor:
            _run_monitor()
            continue
        for dtype in kinds if item is kind else [item.vectors.dtype]:
            if kind is PrincipalBasis:
                _run_principal(dtype)
                continue
            for windowed in (False, True) if item is kind else (item.window is not None,):
                _run_growing(dtype, windowed)


def _run_growing(dtype: np.dtype[Any], windowed: bool) -> None:
    basis = StreamBasis(3, dtype=dtype, window=4 if windowed else None)
    samples = np.eye(3, dtype=dtype)
    for sample in samples:
        basis.push(sample)
    basis.push_many(np.concatenate([samples, samples]))
    basis.explain(samples)


def _run_principal(dtype: np.dtype[Any]) -> None:
    # loud with a sample that comes twice, then quiet: folds of every kind
    samples = np.random.default_rng(0).standard_normal((24, WIDE)).astype(dtype)
    samples[1] = samples[0]
    samples[12:] *= 2.0**-10
    for channels in (4, WIDE):
        basis = PrincipalBasis(channels, rank=1, block=4, forget=0.9, centre=True, dtype=dtype)
        for sample in samples[:4, :channels]:
            basis.push(sample)
        basis.push_many(samples[4:, :channels])


def _run_monitor() -> None:
    monitor = NoveltyMonitor(4, baseline=BASELINE)
    rng = np.random.default_rng(0)
    monitor.push_many(rng.standard_normal((BASELINE + 40, 4)))
    monitor.push(np.full(4, 50.0))
    # a fleet turns columns into rows before its monitors see them
    column = np.zeros(1)
    to_rows(np.array([column.__array_interface__["data"][0]]), 1, 0, 1, np.zeros((1, 1)))
