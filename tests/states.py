"""States and objects for the tests of snapshots, drawn from a seed."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.state import State

DTYPES = ("float32", "float64", "complex64", "complex128", "int32", "int64", "bool")


def orthonormal(rows: int, channels: int, dtype: str = "float64", seed: int = 0) -> NDArray[Any]:
    """Return random orthonormal rows."""
    rng = np.random.default_rng(seed)
    square = rng.normal(size=(channels, rows))
    if np.dtype(dtype).kind == "c":
        square = square + 1j * rng.normal(size=(channels, rows))
    return np.ascontiguousarray(np.linalg.qr(square)[0].T.astype(dtype))


def varied() -> State:
    """Return a state with every dtype, every kind of fact, empty arrays and nested parts."""
    rng = np.random.default_rng(5)
    arrays: dict[str, NDArray[Any]] = {}
    for dtype in DTYPES:
        values = rng.normal(size=(3, 5)) * 4
        if np.dtype(dtype).kind == "c":
            values = values + 1j * rng.normal(size=(3, 5))
        arrays[f"matrix_{dtype}"] = values.astype(dtype)
        arrays[f"vector_{dtype}"] = values[1].astype(dtype)
    arrays["nothing"] = np.empty((0, 4))
    arrays["none"] = np.empty(0, np.int64)
    arrays["special"] = np.array([np.inf, -np.inf, np.nan, -0.0, 5e-324, 1.7976931348623157e308])
    facts = {
        "channels": ["inlet", "Einlaß", "入口", "a\0b", ""],
        "large": 2**53 + 1,
        "larger": -(2**200),
        "tenth": 0.1,
        "minus_zero": -0.0,
        "whole": 1.0,
        "infinite": float("inf"),
        "list": [1, [2.5, float("-inf")], {"x": None}],
        "$float": "not a number at all",
        "nested": {
            "$float": "inf",
            "$$": True,
            "": [],
            "sha256:": "streambasis-snapshot 1 sha256:",
        },
        "surrogate": "\ud800",
    }
    inner = State("Inner", {"yes": True}, {"vectors": orthonormal(2, 5)})
    other = State("Other", {}, {"vectors": orthonormal(3, 5, "complex64"), "x": np.arange(3)})
    return State("Varied", facts, arrays, {"core": inner, "known": other})


def same(one: State, other: State) -> None:
    """Assert that two states are equal bit for bit."""
    assert one.kind == other.kind
    assert repr(one.facts) == repr(other.facts)
    assert list(one.arrays) == list(other.arrays)
    for name, array in one.arrays.items():
        assert array.dtype == other.arrays[name].dtype, name
        assert array.shape == other.arrays[name].shape, name
        assert array.tobytes() == other.arrays[name].tobytes(), name
    assert list(one.parts) == list(other.parts)
    for name, part in one.parts.items():
        same(part, other.parts[name])
