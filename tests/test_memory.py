"""Arrays start at a cache line, and large ones give their pages back."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis.memory import CACHE_LINE, LARGE, aligned_zeros, mapped_zeros


def resident() -> int:
    """Return the bytes of this process that are in memory."""
    with open("/proc/self/smaps_rollup") as file:
        return next(int(line.split()[1]) * 1024 for line in file if line.startswith("Rss:"))


@pytest.mark.parametrize("make", [aligned_zeros, mapped_zeros])
@pytest.mark.parametrize("dtype", ["float32", "complex128", "int64"])
@pytest.mark.parametrize("shape", [(0, 5), (1, 1), (7, 33), (LARGE // 1024, 300)])
def test_arrays_start_at_a_cache_line(make: object, dtype: str, shape: tuple[int, int]) -> None:
    """Small or large, an array is all zeros, in C order, writable and aligned."""
    array = make(shape, dtype)
    assert (array.shape, array.dtype) == (shape, np.dtype(dtype))
    assert array.flags.carray
    assert array.ctypes.data % CACHE_LINE == 0 or array.size == 0
    assert not array.any()
    array[...] = 1
    assert array.sum() == array.size


def test_a_large_array_gives_its_pages_back() -> None:
    """When a mapped array goes, what it took is free again at once."""
    size = 64 * LARGE
    before = resident()
    array = mapped_zeros((size,), "uint8")
    array[...] = 1
    assert resident() - before > 0.9 * size
    del array
    assert resident() - before < 0.1 * size
