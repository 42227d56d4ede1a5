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

    Parameters
    ----------
    reassociate : bool
        Whether sums may be reordered, so that loops vectorize. Each use says why that is sound.
    """
    flags = set(REASSOCIATE) if reassociate else False

    def decorate(function: Callable[..., Any]) -> Any:
        return numba.njit(cache=True, nogil=True, fastmath=flags, error_model="numpy")(function)

    return decorate
