"""The kernels of the monitor against their plain twins."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from streambasis.kernels import monitor as kernels
from tests import reference_monitor as reference

pytestmark = pytest.mark.kernels
ROUNDING = 1e-12


def scored(
    z: NDArray[Any], mean: NDArray[Any], directions: NDArray[Any], first: int,
    whitening: NDArray[Any], limits: tuple[float, float] = (np.inf, np.inf),
) -> list[NDArray[Any]]:  # fmt: skip
    """Return what the kernel fills: coordinates, five columns of numbers, four of flags."""
    m = len(z)
    out = [np.empty((m, len(directions))), *np.empty((5, m)), *np.empty((4, m), np.bool_)]
    work = np.array(limits), np.empty(z.shape[1])
    kernels.score_rows(z, mean, directions, first, whitening, *work, *out)
    return out


@pytest.mark.parametrize("q", [0, 1, 3, 4, 5, 9])
def test_scores_agree_with_matrix_products(q: int) -> None:
    """Coordinates, SPE, rest and T² are those of matrix products, with gaps counting as zero."""
    rng = np.random.default_rng(q)
    n, m, first = 12, 7, min(q, 4)
    z = rng.normal(size=(m, n))
    z[2, 5] = np.nan
    mean = rng.normal(size=n)
    directions = np.ascontiguousarray(np.linalg.qr(rng.normal(size=(n, max(q, 1))))[0].T[:q])
    whitening = rng.normal(size=(2, first))
    out = scored(z, mean, directions, first, whitening)
    expected = reference.score_rows(z, mean, directions, first, whitening)
    for actual, wanted in zip(out[:4], expected, strict=True):
        np.testing.assert_allclose(actual, wanted, rtol=ROUNDING, atol=ROUNDING)


def test_scores_are_compared_with_their_limits() -> None:
    """SPE and what standing events leave have one limit, T² the other; no limit, no verdict."""
    rng = np.random.default_rng(5)
    z, mean = rng.normal(size=(40, 8)), np.zeros(8)
    directions = np.ascontiguousarray(np.linalg.qr(rng.normal(size=(8, 4)))[0].T)
    fixed = z, mean, directions, 2, np.eye(2)
    _, spe, rest, t2, limit, t2_limit, judged, beyond, novel, extreme = scored(*fixed, (4.0, 2.0))
    assert judged.all()
    assert (limit.tolist(), t2_limit.tolist()) == ([4.0] * 40, [2.0] * 40)
    assert beyond.tolist() == (rest > 4.0).tolist()
    assert novel.tolist() == (spe > 4.0).tolist()
    assert extreme.tolist() == (t2 > 2.0).tolist()
    assert 0 < beyond.sum() < novel.sum() < 40
    blind = scored(*fixed, (np.nan, 2.0))
    assert np.isnan(blind[1:6]).all()
    assert not np.any(blind[6:])


@given(flags=st.lists(st.tuples(*[st.booleans()] * 3), max_size=20), forming=st.booleans())
def test_rows_are_sorted_for_the_end_of_the_block(
    flags: list[tuple[bool, bool, bool]], forming: bool
) -> None:
    """The basis takes what is judged and within the limit, the limit only outside a young event."""
    judged, beyond, extreme = np.array(flags, np.bool_).reshape(-1, 3).T.copy()
    beyond &= judged
    out = np.empty((3, len(flags)), np.bool_)
    counts = kernels.note_rows(judged, beyond, extreme, forming, *out)
    expected = reference.note_rows(judged, beyond, extreme, forming)
    assert out.tolist() == expected[0].tolist()
    assert counts == expected[1]


def test_a_row_scores_the_same_in_any_batch() -> None:
    """The result for a row does not depend, to the last bit, on the rows beside it."""
    rng = np.random.default_rng(1)
    n, m, q = 33, 50, 7
    z, mean = rng.normal(size=(m, n)), rng.normal(size=n)
    directions = np.ascontiguousarray(np.linalg.qr(rng.normal(size=(n, q)))[0].T)
    whitening = np.diag(rng.uniform(1, 2, q))
    whole = scored(z, mean, directions, q, whitening)
    for start, stop in ((0, 1), (1, 4), (4, 50)):
        parts = scored(z[start:stop], mean, directions, q, whitening)
        for part, column in zip(parts, whole, strict=True):
            assert np.array_equal(part, column[start:stop])


def test_standardize_clips_and_tells_repetitions() -> None:
    """Values beyond reach are put there, channels that repeat too long are put out, gaps stay."""
    rng = np.random.default_rng(2)
    samples = rng.integers(0, 2, size=(40, 5)).astype(float)
    samples[:, 3] = 7.0
    samples[5, 1] = np.nan
    samples[9, 2] = 1e300
    centre, inverse = rng.normal(size=5), rng.uniform(1, 2, 5)
    reach, freeze = np.full(5, 50.0), np.full(5, -9.0)
    patience = np.array([3, 3, 3, 10, 3])
    held, runs = np.full(5, np.nan), np.zeros(5, np.int64)
    expected = reference.standardize(samples, centre, inverse, reach, freeze, patience, held, runs)
    out = np.empty_like(samples)
    gaps = kernels.standardize(samples, centre, inverse, reach, freeze, patience, held, runs, out)
    assert gaps == 1
    np.testing.assert_allclose(out, expected[0], rtol=ROUNDING)
    assert np.array_equal(held, expected[1])
    assert np.array_equal(runs, expected[2])
    assert (out[11:, 3] == -9.0).all()


def test_parts_are_taken_off() -> None:
    """Only the directions asked for are taken off."""
    rng = np.random.default_rng(3)
    rows, directions = rng.normal(size=(4, 6)), rng.normal(size=(3, 6))
    coordinates = rng.normal(size=(4, 3))
    expected = reference.take_off(rows, coordinates, directions, 1, 3)
    kernels.take_off(rows, coordinates, directions, 1, 3)
    np.testing.assert_allclose(rows, expected, rtol=ROUNDING, atol=ROUNDING)


@given(
    beyond=st.lists(st.booleans(), min_size=1, max_size=60),
    opens=st.integers(1, 4),
    extra=st.integers(0, 4),
    quiet=st.integers(1, 6),
)
def test_walk_opens_on_persistence_and_closes_after_a_quiet_run(
    beyond: list[bool], opens: int, extra: int, quiet: int
) -> None:
    """Events open at the m-th of n samples beyond the limit and close after the quiet run."""
    flags = np.array(beyond)
    judged, shows = np.ones(len(flags), np.bool_), np.zeros((len(flags), 0), np.bool_)
    ring, counters = np.zeros(opens + extra, np.bool_), np.zeros(4, np.int64)
    last, silent, taken = (np.zeros(2, np.int64) for _ in range(3))
    settings = np.array([opens, quiet, 1000, 2])
    found, opened, at = [], -1, 0
    while at < len(flags):
        row, what, which = kernels.walk(
            at, judged[at:], flags[at:], shows[at:], ring, counters, last, silent, taken, settings
        )
        if what == kernels.NOTHING:
            break
        at += row + 1
        assert which == 0
        if what == kernels.OPENED:
            opened = at - 1
            ring[:] = False
            counters[:] = (0, 0, 1, 1)
            silent[0] = 0
        else:
            assert what == kernels.CLOSED
            found.append((opened, at - 1))
            counters[2:] = 0
    assert found == reference.openings(flags, opens, opens + extra, quiet)


def test_walk_passes_over_samples_that_cannot_be_judged() -> None:
    """A sample without verdict neither opens an event nor counts to a quiet run."""
    judged = np.array([True, False, False, True])
    beyond = np.array([True, False, False, True])
    ring, counters = np.zeros(2, np.bool_), np.zeros(4, np.int64)
    work = [np.zeros(1, np.int64) for _ in range(3)]
    found = kernels.walk(
        0, judged, beyond, np.zeros((4, 0), np.bool_), ring, counters, *work, np.array([2, 5, 9, 1])
    )
    assert found == (3, kernels.OPENED, 0)
