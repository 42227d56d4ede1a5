"""How kernels are compiled: one decorator, so that every kernel follows the same rules."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

import numba
import numpy as np
from numba.core.registry import cpu_target
from numba.extending import overload

from streambasis.kernels._cache import KernelCache, warn_once

REASSOCIATE = frozenset({"reassoc", "contract", "arcp", "nsz"})
"""What a kernel may assume about arithmetic: sums may be reordered (an error bound of the same
form), products and sums may be fused (one rounding less). Never ``nnan`` or ``ninf``: with them a
check for NaN is compiled away."""


def kernel(
    *, reassociate: bool = False, internal: bool = False
) -> Callable[[Callable[..., Any]], Any]:
    """Return a decorator that compiles a kernel at its first call and keeps the result on disk.

    Kernels are compiled without numba's memory manager where it has the option for that: one that
    allocates does not compile, and taking a row of an array costs no atomic reference count, which
    was measured at half the time of a push at 64 channels. Elsewhere they only run more slowly.

    A kernel that another one calls is compiled into it. As a function of its own it would stand in
    the object code of each caller, and the linker would give all of them the copy that the process
    happened to load first. The copies are optimized for their callers, and with sums reordered
    they differ in the last digit: a process that compiled its kernels and one that found them on
    disk would not agree bit for bit.

    Parameters
    ----------
    reassociate : bool
        Whether sums may be reordered, so that loops vectorize. Each use says why that is sound.
    internal : bool
        Whether only other kernels call it: then nothing is compiled to call it from Python, which
        was measured to take a quarter of the time that the kernels of a window compile.
    """
    options: dict[str, Any] = {
        "nogil": True,
        "error_model": "numpy",
        "fastmath": set(REASSOCIATE) if reassociate else False,
        "forceinline": True,
        "no_cpython_wrapper": internal,
        "no_cfunc_wrapper": True,
        **without_memory_manager(),
    }

    def decorate(function: Callable[..., Any]) -> Any:
        compiled = numba.njit(**options)(function)
        if hasattr(compiled, "compile"):  # a plain function under NUMBA_DISABLE_JIT
            install_cache(compiled, function)
        return compiled

    return decorate


def without_memory_manager() -> dict[str, Any]:
    """Return the option that leaves numba's memory manager out, or none where it has no such.

    The option is not public: a version that has given it up refuses every kernel that names it.
    """
    known = getattr(cpu_target, "options", None)
    return {"_nrt": False} if hasattr(known, "_nrt") else {}


def install_cache(dispatcher: Any, function: Callable[..., Any]) -> None:
    """Give a dispatcher our cache, unless numba no longer keeps one where it did."""
    if hasattr(dispatcher, "_cache"):
        dispatcher._cache = KernelCache(function)
    else:
        _without_cache.append(function.__name__)


_without_cache: list[str] = []


def entry(function: Any, *arguments: Any) -> Callable[..., Any]:
    """Return a kernel compiled for the types of ``arguments``, as it is called fastest.

    What is returned skips the choice among compiled versions, a fifth of the time of a call, and
    so must be called with arguments of just these types: it does not check more of an array than
    its dimensions and the size of its items.
    """
    if _without_cache:
        warn_once(f"numba {numba.__version__} has no place for them that this version knows")
    if not hasattr(function, "compile"):  # a plain function under NUMBA_DISABLE_JIT
        return cast("Callable[..., Any]", function)
    return cast("Callable[..., Any]", function.compile(tuple(map(numba.typeof, arguments))))


def by_kind(real: Callable[..., Any], complex_: Callable[..., Any]) -> Callable[..., Any]:
    """Return a kernel that is ``real`` or ``complex_`` as its first argument, an array, is."""
    return _chosen_by(lambda dtype: np.dtype(dtype).kind == "c", complex_, real)


def by_width(single: Callable[..., Any], double: Callable[..., Any]) -> Callable[..., Any]:
    """Return a kernel that is ``single`` or ``double`` as the precision of its first argument."""
    return _chosen_by(lambda dtype: np.finfo(dtype).bits == 32, single, double)


def _chosen_by(
    test: Callable[[Any], bool], one: Callable[..., Any], other: Callable[..., Any]
) -> Callable[..., Any]:
    """Return a kernel that is ``one`` where the test of the dtype holds and ``other`` elsewhere.

    The choice is made when its caller is compiled.
    """

    def chosen(*args: Any) -> Any:
        return (one if test(args[0].dtype) else other)(*args)

    @overload(chosen, jit_options={"forceinline": True})
    def _chosen(*args: Any) -> Any:
        picked = one if test(np.dtype(str(args[0].dtype))) else other

        def run(*args: Any) -> Any:  # numba wants the very signature, annotations and all
            return picked(*args)

        return run

    return chosen
