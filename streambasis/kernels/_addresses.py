"""Arrays by their addresses, so that one kernel can go over objects that each own their arrays."""

from __future__ import annotations

import ctypes
import os
from collections.abc import Callable
from typing import Any

import numba
import numpy as np
from numba.core import cgutils
from numba.extending import intrinsic
from numba.np.arrayobj import make_array, populate_array


def _viewer(dtype: Any) -> Callable[..., Any]:
    """Return what gives the C-contiguous array of a shape, a tuple, that lies at an address.

    Whoever calls it sees to it that the array outlives the view. In a kernel it costs nothing: it
    is put together where it is used, since a function compiled without the memory manager cannot
    return an array.
    """
    kind = np.dtype(dtype)
    if os.environ.get("NUMBA_DISABLE_JIT", "0") != "0":

        def view(address, shape):
            count = int(np.prod(shape))
            raw = (ctypes.c_char * (count * kind.itemsize)).from_address(int(address))
            return np.frombuffer(raw, kind).reshape(shape)

        return view

    def typed(typing_context, address, shape):
        del typing_context, address
        found = numba.types.Array(numba.from_dtype(kind), len(shape), "C")
        whole = numba.types.UniTuple(numba.intp, len(shape))
        return found(numba.int64, whole), _lowering(found, kind.itemsize)

    return intrinsic(typed)


def _lowering(found, itemsize):
    """Return how the compiler puts such an array together."""

    def lower(context, builder, signature, arguments):
        del signature
        array = make_array(found)(context, builder)
        lengths = cgutils.unpack_tuple(builder, arguments[1])
        strides = [context.get_constant(numba.types.intp, itemsize)]
        for length in reversed(lengths[1:]):
            strides.insert(0, builder.mul(strides[0], length))
        populate_array(
            array,
            data=builder.inttoptr(arguments[0], array.data.type),
            shape=lengths,
            strides=strides,
            itemsize=context.get_constant(numba.types.intp, itemsize),
            meminfo=None,
        )
        return array._getvalue()

    return lower


floats_at = _viewer(np.float64)
integers_at = _viewer(np.int64)
flags_at = _viewer(np.bool_)
