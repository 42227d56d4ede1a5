"""Accuracy against published behaviour; samples are the columns of the matrices.

Values marked (M) in a comment are quoted from memory of the publication; (V) means recomputed here
with NumPy when the project was set up.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.linalg
import scipy.stats
import statsmodels.api
from numpy.typing import NDArray

from streambasis import StreamBasis
from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.kernels import projection
from tests.reference import DTYPES, epsilon, orthonormal_rows, random_rows

REPRODUCED = 8
"""|A - coordinates·V| allowed, in epsilons of |A| beside what was rejected."""
DIGITS = 1.0
"""Decimal digits that a regression may have less than Householder's: one factor of ten."""


def factorized(columns: NDArray, **settings: object) -> StreamBasis:
    """Push the columns of a matrix one by one; nothing above rounding is rejected."""
    basis = StreamBasis(len(columns), rtol=0.0, dtype=columns.dtype, **settings)
    for column in columns.T:
        basis.push(column)
    return basis


def loss(basis: StreamBasis) -> float:
    """Return the 2-norm of V Vᴴ - I."""
    vectors = basis.vectors
    return float(np.linalg.norm(vectors @ vectors.conj().T - np.eye(basis.rank), 2))


def check(columns: NDArray, basis: StreamBasis) -> None:
    """Check orthonormality, coverage and that the columns are reproduced."""
    audit = basis.audit()
    assert audit.orthogonality < ORTHOGONALITY_LIMIT
    assert audit.coverage <= 1
    size = np.linalg.norm(columns, 2)
    rest = columns.T - basis.coordinates(columns.T) @ basis.vectors
    rejected = 8 * epsilon(columns.dtype) if audit.rank < columns.shape[1] else 0.0
    assert np.linalg.norm(rest, 2) <= (REPRODUCED * epsilon(columns.dtype) + rejected) * size


def prescribed(count: int, values: NDArray, dtype: str, seed: int = 0) -> NDArray:
    """Return a matrix with given singular values and random orthogonal factors."""
    rng = np.random.default_rng(seed)
    wide = "complex128" if np.dtype(dtype).kind == "c" else "float64"
    left = orthonormal_rows(rng, len(values), count, wide).T
    right = orthonormal_rows(rng, len(values), len(values), wide)
    return ((left * values) @ right).astype(dtype)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("power", range(4, 13))
def test_lauchli_matrices_keep_orthogonality(power: int, dtype: str) -> None:
    """Läuchli (1961, Numer. Math. 3): three columns that differ by e only, e from 1e-4 to 1e-12."""
    e = 10.0**-power
    columns = np.vstack([np.ones(3), e * np.eye(3)]).astype(dtype)
    basis = factorized(columns)
    check(columns, basis)
    assert basis.rank == (3 if e > 8 * epsilon(dtype) else 1)
    assert loss(basis) < 4 * epsilon(dtype)


def test_lauchli_shows_what_a_single_pass_loses() -> None:
    """At e = 1e-8 plain MGS leaves q1·q2 = -e/√2 and q1·q3 = -e/√6 (M, V)."""
    e = 1e-8
    columns = np.vstack([np.ones(3), e * np.eye(3)])
    vectors = factorized(columns, reorthogonalize="never").vectors
    assert vectors[0] @ vectors[1] == pytest.approx(-e / np.sqrt(2), rel=1e-3)
    assert vectors[0] @ vectors[2] == pytest.approx(-e / np.sqrt(6), rel=1e-3)
    assert loss(factorized(columns)) < 3e-16


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("order", [2, 4, 8, 12, 16, 20, 25, 30])
def test_hilbert_matrices_keep_orthogonality(order: int, dtype: str) -> None:
    """Hilbert matrices to order 30, condition numbers far beyond the range of the dtype."""
    columns = scipy.linalg.hilbert(order).astype(dtype)
    check(columns, factorized(columns))


@pytest.mark.parametrize(
    ("order", "published"), [(4, 3.0e-13), (5, 1.2e-11), (6, 7.2e-10), (7, 9.2e-9), (8, 2.6e-7)]
)
def test_hilbert_matrices_show_what_a_single_pass_loses(order: int, published: float) -> None:
    """Plain MGS loses what was recomputed (V) within a factor of ten; two passes lose nothing."""
    columns = scipy.linalg.hilbert(order)
    assert published / 10 < loss(factorized(columns, reorthogonalize="never")) < published * 10
    assert loss(factorized(columns)) <= 6e-16
    assert loss(factorized(columns, reorthogonalize="always")) <= 6e-16


def test_hilbert_triangular_factor_to_the_digits_it_has() -> None:
    """|r_jj| of the Hilbert matrix of order 8, to 50 digits with mpmath (V)."""
    published = [1.235889175, 0.1499185393, 0.01182841902, 7.315174863e-4, 3.619175983e-5,
                 1.413034737e-6, 4.154254939e-8, 8.036015792e-10]  # fmt: skip
    diagonal = np.diagonal(factorized(scipy.linalg.hilbert(8)).triangular)
    for j, value in enumerate(published):
        # a column has its digits relative to the first diagonal entry
        assert diagonal[j] == pytest.approx(value, rel=1e-9 + 40 * 2.2e-16 / value)


@pytest.mark.parametrize("seed", range(5))
def test_trefethen_and_bau_eighty_columns(seed: int) -> None:
    """Trefethen & Bau (1997), Lecture 9 (M): MGS follows 2**-j until about j = 62, ours to the
    rounding floor, with orthonormal directions."""
    columns = prescribed(80, 2.0 ** -np.arange(1, 81), "float64", seed)
    residuals = columns.T.copy()
    plain = np.zeros((80, 80))
    diagonal = np.empty(80)
    for j in range(80):
        projection.take_out(plain, 0, j, residuals[j], np.zeros(80))
        diagonal[j] = np.linalg.norm(residuals[j])
        plain[j] = residuals[j] / diagonal[j]
    beyond = diagonal > 100 * 2.0 ** -np.arange(1, 81)
    assert 58 <= 1 + int(np.argmax(beyond)) <= 66
    basis = factorized(columns)
    check(columns, basis)
    assert 45 <= basis.rank <= 62
    ours = np.diagonal(basis.triangular)[:36]
    np.testing.assert_allclose(ours, diagonal[:36], rtol=1e-3)


def test_trefethen_and_bau_two_columns() -> None:
    """Same book: MGS loses 2.3e-11 on two nearly parallel columns, Householder 2e-16 (M)."""
    columns = np.array([[0.70000, 0.70711], [0.70001, 0.70711]])
    assert 1e-11 < loss(factorized(columns, reorthogonalize="never")) < 5e-11
    assert loss(factorized(columns)) < 4e-16


def test_discrete_legendre_polynomials() -> None:
    """Same book: orthogonalized powers on 257 points against P2 and P3; 129/255 - 1/2 (V)."""
    x = np.arange(-128, 129) / 128
    basis = factorized(np.vander(x, 4, increasing=True))
    shapes = basis.vectors / basis.vectors[:, -1:]
    quadratic = np.abs(shapes[2] - (3 * x**2 - 1) / 2).max()
    cubic = np.abs(shapes[3] - (5 * x**3 - 3 * x) / 2).max()
    assert quadratic == pytest.approx(129 / 255 - 1 / 2, rel=1e-12)
    assert cubic == pytest.approx(1.13800e-2, rel=1e-5)


def test_trap_for_the_norm_ratio_criterion() -> None:
    """Giraud & Langou (2003): n = 13, alpha = 0.101; theirs makes all 12 second passes, and the
    ratio of norms with K = 10 none, which costs 1.4e-4 of orthogonality (V)."""
    n = 13
    v = np.arange(1.0, n + 1)
    reflection = np.eye(n) - 2 * np.outer(v, v) / (v @ v)
    columns = reflection @ (0.101 * np.eye(n) + np.diag(np.ones(n - 1), 1))
    basis = StreamBasis(n, rtol=0.0)
    passes = [basis.push(column).passes for column in columns.T]
    assert passes == [1] + [2] * 12
    assert loss(basis) < 2e-15
    ratios = np.linalg.norm(columns, axis=0) / np.diagonal(basis.triangular)
    assert ratios.max() <= 10.1
    assert loss(factorized(columns, reorthogonalize="never")) == pytest.approx(1.4e-4, rel=0.2)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("condition", [1e1, 1e4, 1e8, 1e12, 1e15])
def test_prescribed_singular_values(condition: float, dtype: str) -> None:
    """Singular values spread evenly in logarithm, all large but one, all small but one."""
    for count, rank in ((16, 16), (60, 24), (300, 40)):
        spread = np.logspace(0, -np.log10(condition), rank)
        one_small = np.r_[np.ones(rank - 1), 1 / condition]
        one_large = np.r_[1.0, np.full(rank - 1, 1 / condition)]
        for values in (spread, one_small, one_large):
            columns = prescribed(count, values, dtype)
            check(columns, factorized(columns))


@pytest.mark.parametrize("dtype", DTYPES)
def test_triangular_factor_is_householders_up_to_signs(dtype: str) -> None:
    """On well-conditioned matrices L is the transpose of the R of LAPACK's QR, signs apart."""
    for count, rank in ((16, 16), (50, 20), (200, 30)):
        columns = prescribed(count, np.linspace(1, 3, rank), dtype, count)
        r = np.linalg.qr(columns)[1]
        phase = np.diagonal(r) / np.abs(np.diagonal(r))
        expected = (r / phase[:, None]).T
        basis = factorized(columns)
        bound = 10 * rank * epsilon(dtype)
        assert np.abs(basis.triangular - expected).max() <= bound
        pivots = basis.triangular @ basis.vectors
        assert np.abs(pivots - columns.T).max() <= bound


def digits(found: NDArray, certified: NDArray) -> float:
    """Return the least number of right digits, the log relative error of NIST."""
    error = np.abs(found - certified) / np.abs(certified)
    return float(-np.log10(np.maximum(error, 1e-16)).min())


def regressions() -> dict[str, tuple[NDArray, NDArray, NDArray]]:
    """Return designs, responses and certified coefficients of NIST StRD problems.

    Source: National Institute of Standards and Technology, Statistical Reference Datasets
    (public domain). Longley: data as statsmodels ships them; Norris: as scipy's tests ship them;
    Wampler: by their published definition. Filip is left out: no package at hand ships its data.
    """
    longley = statsmodels.api.datasets.longley.load_pandas()
    x = np.arange(21.0)
    powers = np.vander(x, 6, increasing=True)
    mirrored = [759, -2048, 2048, -2048, 2523, -2048, 2048, -2048, 1838, -2048]
    disturbance = np.array([*mirrored, 2048, *mirrored[::-1]], float)
    tenth = 10.0 ** -np.arange(6)
    path = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_linregress" / "Norris.dat"
    norris = np.loadtxt(path.read_text().splitlines()[60:])
    assert len(norris) == 36
    exact = powers @ np.ones(6)
    return {
        "Longley": (
            np.column_stack([np.ones(16), longley.exog.to_numpy(float)]),
            longley.endog.to_numpy(float),
            np.array([-3482258.63459582, 15.0618722713733, -0.0358191792925910,
                      -2.02022980381683, -1.03322686717359, -0.0511041056535807,
                      1829.15146461355]),
        ),
        "Norris": (
            np.column_stack([np.ones(36), norris[:, 1]]),
            norris[:, 0],
            np.array([-0.262323073774029, 1.00211681802045]),
        ),
        "Wampler1": (powers, exact, np.ones(6)),
        "Wampler2": (powers, powers @ tenth, tenth),
        "Wampler3": (powers, exact + disturbance, np.ones(6)),
        "Wampler4": (powers, exact + 100 * disturbance, np.ones(6)),
        "Wampler5": (powers, exact + 10_000 * disturbance, np.ones(6)),
    }  # fmt: skip


@pytest.mark.parametrize(
    "name", ["Longley", "Norris", "Wampler1", "Wampler2", "Wampler3", "Wampler4", "Wampler5"]
)
def test_nist_regressions_have_the_digits_of_householder(name: str) -> None:
    """Columns pushed as samples, the response explained: the weights are the coefficients."""
    design, response, certified = regressions()[name]
    basis = factorized(design)
    ids, weights, residual = basis.explain(response)
    assert list(ids) == list(range(design.shape[1]))
    q, r = scipy.linalg.qr(design, mode="economic")
    householder = scipy.linalg.solve_triangular(r, q.T @ response)
    assert digits(weights, certified) >= digits(householder, certified) - DIGITS
    freedom = len(response) - len(certified)
    deviation = {"Longley": 304.854073561965, "Wampler3": 2360.14502379268}
    if name in deviation:
        found = np.linalg.norm(residual) / np.sqrt(freedom)
        assert found == pytest.approx(deviation[name], rel=1e-9)


@pytest.mark.parametrize(
    ("dtype", "power"),
    [(d, p) for d in ("float32", "complex64") for p in (-110, -100, 100, 121)]
    + [(d, p) for d in ("float64", "complex128") for p in (-1000, -996, 996, 1000)],
)
def test_extreme_scales_lose_nothing(dtype: str, power: int) -> None:
    """Samples near 1e±300 (1e±30 in single precision) decide as the same samples near 1, bit for
    bit, though 1 is 100 and 300 orders of magnitude away."""
    columns = prescribed(20, np.logspace(0, -4 if "32" in dtype else -6, 12), dtype)
    samples = np.ascontiguousarray(columns.T)
    parts = samples.view(samples.real.dtype)
    # what a part has to lose below the least number it has lost before, in both
    parts[:] = np.where(np.abs(parts) < 1e-2, 0, parts)
    far = np.ldexp(parts, power).view(dtype)
    one, other = StreamBasis(20, dtype=dtype), StreamBasis(20, dtype=dtype)
    for near_sample, far_sample in zip(samples, far, strict=True):
        expected, decision = one.push(near_sample), other.push(far_sample)
        assert (decision.reason, decision.passes) == (expected.reason, expected.passes)
        assert decision.residual == np.ldexp(expected.residual, power)
    np.testing.assert_array_equal(one.vectors, other.vectors)


def test_random_columns_of_every_shape() -> None:
    """Square, tall and single columns of every dtype stay within the bound."""
    rng = np.random.default_rng(11)
    for dtype in DTYPES:
        for count, rank in ((1, 1), (2, 2), (17, 17), (100, 3), (130, 130)):
            columns = random_rows(rng, rank, count, dtype).T
            check(columns, factorized(columns))
