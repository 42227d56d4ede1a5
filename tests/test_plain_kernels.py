"""The kernel that takes plain samples, against the general way and against NumPy."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from streambasis import NoveltyMonitor
from streambasis.kernels import plain
from tests.fleets import CONFIG, feed

pytestmark = pytest.mark.kernels
ROUNDING = 1e-9
"""A few roundings of each sample, carried on through some folds of the basis."""


@given(rows=st.integers(0, 150), columns=st.integers(1, 7), start=st.integers(0, 150))
def test_columns_become_rows(rows: int, columns: int, start: int) -> None:
    """to_rows fills the rows asked for with what NumPy puts side by side, and no other."""
    data = np.random.default_rng(rows).normal(size=(columns, rows))
    data[:, ::5] = np.nan
    addresses = np.array([row.__array_interface__["data"][0] for row in data])
    out = np.zeros((rows, columns))
    start = min(start, rows)
    assert plain.to_rows(addresses, rows, start, rows, out) == -1
    assert np.array_equal(out[start:], data.T[start:], equal_nan=True)
    assert not out[:start].any()


@pytest.mark.parametrize("found", [(0, 2), (63, 0), (64, 1), (149, 2)])
def test_the_first_infinite_value_is_told(found: tuple[int, int]) -> None:
    """to_rows returns where the first infinite value stands, whichever rows come later."""
    data = np.zeros((3, 150))
    data[found[1], found[0]] = -np.inf
    data[1, 149] = np.inf
    addresses = np.array([row.__array_interface__["data"][0] for row in data])
    expected = found[0] * 3 + found[1] if found[0] < 149 else 149 * 3 + 1
    assert plain.to_rows(addresses, 150, 0, 150, np.zeros((150, 3))) == expected


def test_the_kernel_decides_like_the_general_way(monkeypatch: pytest.MonkeyPatch) -> None:
    """With every sample sent the general way, decisions and the basis are the same to rounding."""
    values = feed(0, 900)
    values[600:640] *= 6.0  # known directions, unusual size
    quick = NoveltyMonitor(**CONFIG)
    table = quick.push_many(values)
    taken = []

    def nothing(*given: Any) -> None:
        taken.append(len(given[0]))
        given[-1][:] = given[1] < given[2]

    monkeypatch.setattr(plain, "take_plain", nothing)
    slow = NoveltyMonitor(**CONFIG)
    other = slow.push_many(values)
    assert taken
    for name in table.column_names:
        actual, expected = table[name].to_numpy(), other[name].to_numpy()
        if actual.dtype.kind == "f":
            np.testing.assert_allclose(actual, expected, rtol=ROUNDING)
        else:
            assert actual.tolist() == expected.tolist(), name
    assert np.count_nonzero(table["extreme"].to_numpy()) > 10
    np.testing.assert_allclose(quick.basis.energies, slow.basis.energies, rtol=ROUNDING)


def test_adopted_behaviour_is_taken_off_by_the_kernel_too(monkeypatch: pytest.MonkeyPatch) -> None:
    """Once an event is adopted, samples that show it are plain, and judged as the general way."""
    values = feed(1, 1200)
    values[700:, 3] += 4.0
    answers = []
    for kernel in (plain.take_plain, None):
        monitor = NoveltyMonitor(**CONFIG)
        if kernel is None:

            def nothing(*given: Any) -> None:
                given[-1][:] = given[1] < given[2]

            monkeypatch.setattr(plain, "take_plain", nothing)
        monitor.push_many(values[:800])
        monitor.adopt(monitor.events[-1]["event"])
        answers.append(monitor.push_many(values[800:]))
    assert not answers[0]["novel"].to_numpy()[:200].all()
    for name in ("spe", "t2", "limit"):
        first, second = (answer[name].to_numpy() for answer in answers)
        np.testing.assert_allclose(first, second, rtol=1e-7)
