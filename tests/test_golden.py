"""Snapshots made by earlier versions load for ever, as what they were."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import streambasis
from streambasis.seal import VERSION
from streambasis.snapshot import KINDS

GOLDEN = Path(__file__).parent / "golden"
FILES = sorted(GOLDEN.glob("*.arrow"))
CLOSE = 1e-12
"""Coordinates go through the inner product on the way out, which other machines round otherwise."""

_spec = importlib.util.spec_from_file_location("make", GOLDEN / "make.py")
assert _spec is not None
assert _spec.loader is not None
make = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(make)


def alike(actual: Any, expected: Any) -> bool:
    """Return whether two values are equal, numbers up to rounding."""
    if isinstance(expected, float):
        return bool(np.isclose(actual, expected, rtol=CLOSE, atol=CLOSE))
    if isinstance(expected, list):
        pairs = zip(actual, expected, strict=True)
        return len(actual) == len(expected) and all(alike(a, b) for a, b in pairs)
    if isinstance(expected, dict):
        return set(actual) == set(expected) and all(alike(actual[k], expected[k]) for k in expected)
    return bool(actual == expected)


def test_every_kind_of_this_version_is_there() -> None:
    """There is a file for each of the objects that the script makes."""
    assert {path.name for path in FILES} >= {f"{name}.v{VERSION}.arrow" for name in make.MAKERS}
    assert set(KINDS) <= {
        json.loads(path.with_suffix(".json").read_text())["kind"] for path in FILES
    }


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_golden_snapshots_load_as_what_they_were(path: Path) -> None:
    """A file made when its version was new gives the same object today, ready to go on."""
    obj = streambasis.load(path)
    expected = json.loads(path.with_suffix(".json").read_text())
    told = make.facts(obj)
    for name, value in expected.items():
        assert alike(told[name], value), name
    count = obj.count
    timed = "window" in path.name
    obj.push_many(make.samples(50, seed=8), **({"at": np.arange(50) + 100.0} if timed else {}))
    assert obj.count == count + 50
