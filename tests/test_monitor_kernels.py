"""The kernels of the monitor against their plain twins."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from streambasis.kernels import monitor as kernels
from tests import reference_monitor as reference

pytestmark = pytest.mark.kernels

pytestmark = pytest.mark.kernels
ROUNDING = 1e-12


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
    out = np.empty((m, q)), *(np.empty(m) for _ in range(3))
    kernels.score_rows(z, mean, directions, first, whitening, np.empty(n), *out)
    expected = reference.score_rows(z, mean, directions, first, whitening)
    for actual, wanted in zip(out, expected, strict=True):
        np.testing.assert_allclose(actual, wanted, rtol=ROUNDING, atol=ROUNDING)


def test_a_row_scores_the_same_in_any_batch() -> None:
    """The result for a row does not depend, to the last bit, on the rows beside it."""
    rng = np.random.default_rng(1)
    n, m, q = 33, 50, 7
    z, mean = rng.normal(size=(m, n)), rng.normal(size=n)
    directions = np.ascontiguousarray(np.linalg.qr(rng.normal(size=(n, q)))[0].T)
    whitening = np.diag(rng.uniform(1, 2, q))

    def scored(rows: np.ndarray) -> list[np.ndarray]:
        out = np.empty((len(rows), q)), *(np.empty(len(rows)) for _ in range(3))
        kernels.score_rows(rows, mean, directions, q, whitening, np.empty(n), *out)
        return list(out)

    whole = scored(z)
    for start, stop in ((0, 1), (1, 4), (4, 50)):
        for part, field in zip(scored(z[start:stop]), whole, strict=True):
            assert np.array_equal(part, field[start:stop])


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
