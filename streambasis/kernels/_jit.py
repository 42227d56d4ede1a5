"""How kernels are compiled: one decorator, so that every kernel follows the same rules."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba

REASSOCIATE = frozenset({"reassoc", "contract", "arcp", "nsz"})
"""What a kernel may assume about arithmetic: sums may be reordered (an error bound of the same
form), products and sums may be fused (one rounding less). Never ``nnan`` or ``ninf``: with them a
check for NaN is compiled away."""


def kernel(*, reassociate: bool = False) -> Callable[[Callable[..., Any]], Any]:
    """Return a decorator that compiles a kernel at its first call and caches the result.

    Kernels are compiled without numba's memory manager (its option ``_nrt``): one that allocates
    does not compile, and taking a row of an array costs no atomic reference count, which was
    measured at half the time of a push at 64 channels.

    Parameters
    ----------
    reassociate : bool
        Whether sums may be reordered, so that loops vectorize. Each use says why that is sound.
    """
    options: dict[str, Any] = {
        "cache": True,
        "nogil": True,
        "fastmath": set(REASSOCIATE) if reassociate else False,
        "error_model": "numpy",
        "_nrt": False,
    }

    def decorate(function: Callable[..., Any]) -> Any:
        return numba.njit(**options)(function)

    return decorate
