"""The window against published downdating problems, scipy's updates, and its own wear."""

from __future__ import annotations

import numpy as np
import pytest
import reference_window as reference
import scipy.linalg

from streambasis import StreamBasis
from streambasis.audit import ORTHOGONALITY_LIMIT

DTYPES = ("float64", "float32", "complex128", "complex64")
EPSILON = float(np.finfo(float).eps)


def triangle(rows: np.ndarray) -> np.ndarray:
    """Return the R of a QR factorization with a positive diagonal."""
    r = np.linalg.qr(rows, mode="r")
    return np.sign(np.diag(r))[:, None] * r


def kept_rows(basis: StreamBasis) -> np.ndarray:
    """Return the samples of a window as the basis still knows them."""
    held = reference.laid_open(basis)
    scales = np.ldexp(1.0, held["exponents"].astype(int))[:, None]
    return scales * (held["coordinates"] @ held["vectors"])


@pytest.mark.parametrize("power", [0, 3, 4, 6, 8])
@pytest.mark.parametrize("columns", [5, 12])
def test_after_an_outlier_has_left_the_error_is_that_of_a_fresh_factorization(power, columns):
    """An outlier of 10**power enters and leaves a window of 8 rows; nothing of it stays.

    Björck, Park & Eldén (1994), "Accurate downdating of least squares solutions", SIAM J. Matrix
    Anal. Appl. 15:549 (layout from memory): 50 rows uniform in (0, 1), an outlier in row 18,
    column 3. There, downdating from R loses all digits at 1e8, and keeping Q about half of them.
    Twelve columns make the directions rotate at every row, five make only pivots change.
    """
    rng = np.random.default_rng(18)
    rows = rng.uniform(0.0, 1.0, (50, columns))
    rows[17, 2] *= 10.0**power
    basis = StreamBasis(columns, window=8)
    for number, row in enumerate(rows):
        basis.push(row)
        if number < 7:
            continue
        window = rows[number - 7 : number + 1]
        expected = np.linalg.svd(window)[2][: basis.rank]
        assert basis.rank == min(8, columns)
        limit = 100 * EPSILON * np.linalg.norm(window, axis=1)
        assert (np.linalg.norm(kept_rows(basis) - window, axis=1) < limit).all()
        if number >= 17 + 8:
            exact = triangle(window)
            error = np.linalg.norm(triangle(kept_rows(basis)) - exact) / np.linalg.norm(exact)
            assert error < 200 * EPSILON * max(1.0, np.linalg.cond(window) if columns == 12 else 1)
            assert reference.distance(expected, basis.vectors) < 1e-12
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT


@pytest.mark.parametrize("rtol", [1e-4, None, 1e-10])
def test_near_dependent_windows_stay_covered_and_exact(rtol):
    """Rows of the 25×5 Hilbert matrix, then the same backwards, in a window of 8 rows.

    The second problem of Björck, Park & Eldén (1994; from memory): windows that are dependent to
    1e-8 and beyond. Whatever rank the tolerance gives, each row stays within it.
    """
    hilbert = scipy.linalg.hilbert(25)[:, :5]
    rows = np.concatenate([hilbert, hilbert[::-1]])
    basis = StreamBasis(5, window=8, rtol=rtol)
    bound = 2.0**-26 if rtol is None else rtol
    for number, row in enumerate(rows):
        basis.push(row)
        window = rows[max(0, number - 7) : number + 1]
        outside = np.linalg.norm(basis.residual(window), axis=1)
        assert (
            outside <= (bound * (1 + 1e-6) + 8 * EPSILON) * np.linalg.norm(window, axis=1)
        ).all()
        assert reference.reproduction(basis, window) < 3.0
    audit = basis.audit()
    assert audit.coverage <= 1.0
    assert audit.orthogonality < ORTHOGONALITY_LIMIT


def test_the_span_is_that_of_scipy_updates_on_the_same_schedule():
    """scipy.linalg.qr_insert and qr_delete, one column in and one out, keep the same span."""
    rng = np.random.default_rng(4)
    channels, kept = 24, 10
    samples = rng.standard_normal((600, channels))
    basis = StreamBasis(channels, window=kept)
    basis.push_many(samples[:kept])
    q, r = scipy.linalg.qr(samples[:kept].T, mode="economic")
    held = list(range(kept))
    for number in range(kept, len(samples)):
        if number % 3:
            place = 0
        else:
            place = int(rng.integers(0, kept))
            basis.retract(held[place])
        q, r = scipy.linalg.qr_delete(q, r, place, which="col")
        q, r = scipy.linalg.qr_insert(q, r, samples[number], kept - 1, which="col")
        del held[place]
        held.append(number)
        basis.push(samples[number])
        assert basis.members.tolist() == held
        assert reference.distance(q.T, basis.vectors) < 1e-10


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize(("channels", "kept"), [(3, 2), (16, 15), (16, 40), (48, 30)])
def test_nothing_drifts_where_every_slide_rotates(dtype, channels, kept):
    """Independent samples: orthonormality and coordinates keep to the contract, by renewals."""
    rng = np.random.default_rng(channels)
    basis = StreamBasis(channels, window=kept, dtype=dtype)
    for _ in range(12):
        samples = rng.standard_normal((300, channels))
        if np.dtype(dtype).kind == "c":
            samples = samples + 1j * rng.standard_normal(samples.shape)
        samples = samples.astype(dtype)
        basis.push_many(samples)
        for sample in samples[:40]:
            basis.push(sample)
        window = np.concatenate([samples, samples[:40]])[-kept:]
        assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
        assert reference.reproduction(basis, window) < 3.0
    assert basis.audit().renewals > 0


def test_samples_that_stay_while_others_come_and_go_are_not_worn():
    """A sample taken back at once leaves the coordinates of those that stay as they were."""
    rng = np.random.default_rng(9)
    basis = StreamBasis(12, window=20)
    staying = rng.standard_normal((5, 12))
    basis.push_many(staying)
    for _ in range(5000):
        basis.retract(basis.push(rng.standard_normal(12)).sample)
    assert basis.rank == 5
    assert reference.reproduction(basis, staying) < 3.0
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT


@pytest.mark.parametrize("dtype", DTYPES)
def test_renewal_changes_nothing_but_rounding(dtype):
    """renew() is counted, and span, pivots and explanations stay."""
    rng = np.random.default_rng(31)
    basis = StreamBasis(9, window=6, dtype=dtype)
    samples = rng.standard_normal((100, 9)).astype(dtype)
    basis.push_many(samples)
    before, pivots, counted = basis.vectors, basis.pivots.tolist(), basis.audit().renewals
    basis.renew()
    assert basis.audit().renewals == counted + 1
    assert basis.pivots.tolist() == pivots
    assert np.abs(basis.vectors - before).max() < 50 * np.finfo(dtype).eps
    assert reference.reproduction(basis, samples[-6:]) < 3.0


def test_the_pivot_is_taken_from_samples_well_along_the_direction():
    """A newer sample that needs a direction by a millionth does not take over from a full one."""
    first, second = np.eye(4)[:2]
    basis = StreamBasis(4, window=5)
    basis.push_many([second, first, 2.0 * second, first + 1e-6 * second, first + 2e-6 * second])
    assert basis.push(first).expired == 1
    assert basis.pivots.tolist() == [1, 2]
    assert basis.audit().condition < 2.0
    basis.retract(2)
    assert basis.pivots.tolist() == [1, 4]
    assert basis.rank == 2
