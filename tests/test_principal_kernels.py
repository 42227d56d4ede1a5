"""The kernels of the principal basis against their plain NumPy twins, over all dtypes."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis.audit import ORTHOGONALITY_LIMIT, orthogonality
from streambasis.kernels import principal as kernels
from streambasis.samples import DTYPES
from tests import reference_principal as reference
from tests.reference_principal import normal

pytestmark = pytest.mark.kernels

SAFE = {"float32": 2.0**100, "complex64": 2.0**100, "float64": 2.0**800, "complex128": 2.0**800}
ROUNDING = {"float32": 1e-5, "complex64": 1e-5, "float64": 1e-13, "complex128": 1e-13}


def orthonormal(rng: np.random.Generator, rows: int, channels: int, dtype: str) -> np.ndarray:
    """Return orthonormal rows."""
    return np.ascontiguousarray(np.linalg.qr(normal(rng, (channels, rows), dtype))[0].T)


@pytest.mark.parametrize("exponent", [0, 90, -90])
@pytest.mark.parametrize("centred", [False, True])
@pytest.mark.parametrize("dtype", DTYPES)
def test_one_sample_is_scored_put_into_the_block_and_counted(
    dtype: str, centred: bool, exponent: int
) -> None:
    """push_principal gives the twin's scores for samples and spreads in any unit."""
    rng = np.random.default_rng(1)
    directions = orthonormal(rng, 3, 20, dtype)
    spreads = np.array([3.0, 2.0, 1.0])
    mean = normal(rng, (20,), dtype) * np.float32(centred)
    sample = normal(rng, (20,), dtype)
    header = np.zeros(kernels.HEADER, np.int64)
    header[[kernels.RANK, kernels.CENTRED, kernels.EXPONENT]] = 2, centred, exponent
    block = np.zeros((4, 20), dtype)
    unit = np.float32(2.0**exponent)
    work = np.zeros(20, dtype), np.zeros(3, dtype)
    for number in range(2):
        found = kernels.push_principal(
            sample * unit, mean * unit, directions, spreads, header, *work, block
        )
        expected = reference.scores((sample - mean)[None], directions[:2], spreads[:2])
        norm, residual, spe, t2 = (float(field[0]) for field in expected)
        scaled = [norm * 2.0**exponent, residual * 2.0**exponent, spe * 4.0**exponent, t2]
        assert found[0] == number
        assert found[5:] == (2, -1)
        np.testing.assert_allclose(found[1:5], scaled, rtol=ROUNDING[dtype])
        np.testing.assert_array_equal(block[number], sample * unit)
    assert header[kernels.COUNT] == header[kernels.FILL] == 2


@pytest.mark.parametrize("bad", [np.nan, np.inf])
@pytest.mark.parametrize("dtype", DTYPES)
def test_a_bad_value_is_located_and_nothing_changes(dtype: str, bad: float) -> None:
    """The position of the first value that is not finite comes back; block and counts stay."""
    header, block = np.zeros(kernels.HEADER, np.int64), np.zeros((2, 5), dtype)
    sample = np.array([1, 2, bad, bad, 3]).astype(dtype)
    arrays = np.zeros(5, dtype), np.zeros((0, 5), dtype), np.zeros(0), header
    work = np.zeros(5, dtype), np.zeros(1, dtype)
    for centred in (0, 1):
        header[kernels.CENTRED] = centred
        assert kernels.push_principal(sample, *arrays, *work, block)[-1] == 2
        assert header[kernels.COUNT] == header[kernels.FILL] == 0
        assert not block.any()


@pytest.mark.parametrize("dtype", DTYPES)
def test_row_squares_tell_rows_out_of_range(dtype: str) -> None:
    """Squared norms are the twin's; one row out of range, or vanishing in it, is reported."""
    rng = np.random.default_rng(2)
    rows = normal(rng, (6, 33), dtype)
    rows[3] = 0
    most = SAFE[dtype]
    out = np.empty(6)
    assert kernels.row_squares(rows, 1 / most, most, out) == kernels.USUAL
    squares, usual = reference.row_squares(rows, 1 / most, most)
    assert usual
    np.testing.assert_allclose(out, squares, rtol=ROUNDING[dtype])
    for factor in (most**-0.55, most**0.55):
        rows[4] = normal(rng, (33,), dtype) * np.finfo(dtype).dtype.type(factor)
        assert kernels.row_squares(rows, 1 / most, most, out) == kernels.UNUSUAL
        assert not reference.row_squares(rows, 1 / most, most)[1]


@pytest.mark.parametrize("shrink", [0.0, 0.1])
@pytest.mark.parametrize("dtype", DTYPES)
def test_rows_are_weighed_by_a_matrix_and_by_its_transpose(dtype: str, shrink: float) -> None:
    """weigh_rows and weigh_rows_back are products with the twin's matrix and its transpose."""
    rng = np.random.default_rng(8)
    rows, roots = normal(rng, (9, 4), dtype), 0.9 ** np.arange(9.0)
    matrix = reference.weighing(roots, shrink)
    total = np.empty(4, np.result_type(dtype, np.float64))
    for weigh, expected in (
        (kernels.weigh_rows, matrix @ rows),
        (kernels.weigh_rows_back, matrix.T @ rows),
    ):
        weighed = rows.copy()
        weigh(weighed, roots, shrink, total)
        np.testing.assert_allclose(weighed, expected, rtol=ROUNDING[dtype], atol=ROUNDING[dtype])


@pytest.mark.parametrize("dtype", DTYPES)
def test_squares_outside_tell_where_they_cancel(dtype: str) -> None:
    """What coordinates leave of squares is the twin's, and samples with little left are listed."""
    rng = np.random.default_rng(7)
    coordinates = normal(rng, (9, 5), dtype)
    squares = (np.abs(coordinates.astype(np.complex128)) ** 2).sum(axis=1)
    squares *= np.array([1.0, 1.001, 1.1, 2, 9, 1, 1.01, 5, 1])
    outside, close = np.empty(9), np.full(9, -1)
    found = kernels.outside_squares(coordinates, squares, 0.02, outside, close)
    left, listed = reference.outside_squares(coordinates, squares, 0.02)
    np.testing.assert_allclose(outside, left, atol=10 * ROUNDING[dtype])
    np.testing.assert_array_equal(close[:found], listed)
    assert found == 5


@pytest.mark.parametrize("dtype", DTYPES)
def test_rows_are_scored_from_all_coordinates(dtype: str) -> None:
    """What lies along directions that are held but not reported counts as residual."""
    rng = np.random.default_rng(3)
    directions = orthonormal(rng, 4, 20, dtype)
    rows = normal(rng, (7, 20), dtype)
    spreads = np.array([2.0, 1.0])
    coordinates = rows @ directions.conj().T
    outside = np.linalg.norm(rows - coordinates @ directions, axis=1).astype(np.float64) ** 2
    residuals, spes, t2s = np.empty((3, 7))
    kernels.score_rows(coordinates, spreads, 2, outside, residuals, spes, t2s)
    _, residual, spe, t2 = reference.scores(rows, directions[:2], spreads)
    for found, expected in ((residuals, residual), (spes, spe), (t2s, t2)):
        np.testing.assert_allclose(found, expected, rtol=ROUNDING[dtype])


@pytest.mark.parametrize("dtype", DTYPES)
def test_rows_are_orthonormalized_and_dependent_ones_dropped(dtype: str) -> None:
    """The rows equal coordinates times held plus factor times new directions, all orthonormal."""
    rng = np.random.default_rng(4)
    stack = np.zeros((12, 18), dtype)
    stack[:3] = orthonormal(rng, 3, 18, dtype)
    rows = normal(rng, (7, 18), dtype)
    rows[2] = rows[0] - 2 * rows[1]
    rows[4] = stack[0] + stack[2]
    rows[5] = 0
    floors = 32 * np.finfo(dtype).eps * np.linalg.norm(rows, axis=1).astype(np.float64)
    coordinates, factor = np.zeros((7, 3), dtype), np.zeros((7, 7), dtype)
    work = np.zeros(18, dtype), np.zeros(12, dtype)
    added = kernels.orthonormal_rows(rows, floors, stack, 3, coordinates, factor, *work)
    assert added == 4
    assert orthogonality(stack[: 3 + added]) < ORTHOGONALITY_LIMIT
    again = coordinates @ stack[:3] + factor[:, :added] @ stack[3 : 3 + added]
    np.testing.assert_allclose(again, rows, atol=100 * np.finfo(dtype).eps)


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_rotated_rows_are_orthogonal_or_said_not_to_be(dtype: str) -> None:
    """Rows end orthogonal, the other array takes the same turns; what is not finite is reported."""
    rng = np.random.default_rng(9)
    rows = normal(rng, (6, 8), dtype)
    rows[5] = rows[0] + rows[1]
    turned, turns = rows.copy(), np.eye(6, dtype=dtype)
    assert kernels.rotate_orthogonal(turned, turns, 60) == kernels.USUAL
    np.testing.assert_allclose(turns @ rows, turned, atol=1e-14)
    np.testing.assert_allclose(turns @ turns.conj().T, np.eye(6), atol=1e-14)
    gram = turned @ turned.conj().T
    np.testing.assert_allclose(gram, np.diag(gram.diagonal()), atol=1e-13)
    assert kernels.rotate_orthogonal(rows.copy(), turns, 1) == kernels.UNUSUAL
    rows[2, 3] = np.inf
    assert kernels.rotate_orthogonal(rows, turns, 60) == kernels.UNUSUAL


@pytest.mark.parametrize("dtype", DTYPES)
def test_the_loss_is_the_largest_row_sum(dtype: str) -> None:
    """subtract_identity leaves the Gram matrix less the identity and returns its 1-norm."""
    gram = normal(np.random.default_rng(5), (6, 6), dtype)
    expected = gram - np.eye(6, dtype=dtype)
    norm = kernels.subtract_identity(gram)
    np.testing.assert_array_equal(gram, expected)
    assert norm == pytest.approx(np.abs(expected).sum(axis=1).max(), rel=1e-5)


@pytest.mark.parametrize("dtype", DTYPES)
def test_the_least_magnitude_is_that_of_numpy(dtype: str) -> None:
    """least_magnitude is the plain expression it stands for."""
    row = normal(np.random.default_rng(6), (9,), dtype)
    assert kernels.least_magnitude(row) == pytest.approx(np.abs(row).min(), rel=1e-6)
