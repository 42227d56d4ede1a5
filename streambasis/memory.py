"""Arrays that start where a cache line does."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

CACHE_LINE = 64
"""Bytes. A push to rows that start elsewhere was measured a third slower: half of its vector loads
then touch two cache lines."""


def aligned_zeros(shape: int | tuple[int, ...], dtype: DTypeLike) -> NDArray[Any]:
    """Return an array of zeros, C-contiguous, whose first entry starts a cache line.

    Parameters
    ----------
    shape : int or tuple of int
    dtype : dtype
    """
    kind = np.dtype(dtype)
    size = int(np.prod(shape)) * kind.itemsize
    raw = np.zeros(size + CACHE_LINE, np.uint8)
    start = -raw.ctypes.data % CACHE_LINE
    return raw[start : start + size].view(kind).reshape(shape)
