"""Inner products: two maps that undo each other and turn the product into the Euclidean one."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.linalg

from streambasis.errors import SettingError
from streambasis.inner import Inner
from tests.reference import DTYPES, epsilon, random_rows

COUNT = 7


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("kind", ["none", "weights", "matrix", "ill-conditioned"])
def test_entering_turns_the_inner_product_into_the_euclidean_one(dtype: str, kind: str) -> None:
    """<a, b> = aᴴ M b is the plain product of what entered; leaving undoes entering."""
    rng = np.random.default_rng(1)
    root = random_rows(rng, COUNT, COUNT, "complex128" if "c" in dtype else "float64")
    matrix: Any = root @ root.conj().T + np.eye(COUNT)
    given: Any = matrix
    if kind == "none":
        given, matrix = None, np.eye(COUNT)
    elif kind == "weights":
        given = rng.uniform(0.1, 10, COUNT)
        matrix = np.diag(given)
    elif kind == "ill-conditioned":
        given = matrix = scipy.linalg.hilbert(COUNT) + 1e-2 * np.eye(COUNT)
    inner = Inner(given, COUNT, np.dtype(dtype))
    a, b = random_rows(rng, 2, COUNT, dtype)
    bound = 100 * epsilon(dtype) * np.linalg.norm(matrix) * np.linalg.norm(a) * np.linalg.norm(b)
    assert abs(np.vdot(inner.enter(a), inner.enter(b)) - a.conj() @ matrix @ b) <= bound
    condition = np.linalg.cond(matrix)
    pair = np.array([a, b])
    np.testing.assert_allclose(
        inner.leave(inner.enter(pair)), pair, atol=20 * condition * epsilon(dtype)
    )
    assert inner.enter(pair).dtype == np.dtype(dtype)
    assert inner.nbytes >= (0 if kind == "none" else COUNT * 4)


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ([1.0, 2.0], "shape (2,), expected None, (3,) or (3, 3)"),
        ([1.0, 0.0, 1.0], "weight 0.0 of channel 1"),
        ([1.0, 1.0, -2.0], "weight -2.0 of channel 2"),
        ([1.0, np.nan, 1.0], "finite"),
        (["a", "b", "c"], "finite"),
        (np.diag([1.0, 1.0, -1.0]), "not positive definite"),
        (np.triu(np.ones((3, 3))) + np.eye(3), "conjugate transpose"),
        (np.eye(3) * 1j, "complex"),
        (np.ones((3, 3)), "not positive definite"),
    ],
)
def test_wrong_inner_products_are_refused(given: Any, message: str) -> None:
    """A matrix that is no inner product raises an error that says why."""
    with pytest.raises(SettingError) as caught:
        Inner(given, 3, np.dtype("float64"))
    assert message in str(caught.value)


def test_what_was_given_is_kept_apart() -> None:
    """A later change of the given weights changes nothing."""
    weights = np.array([1.0, 4.0])
    inner = Inner(weights, 2, np.dtype("float64"))
    weights[:] = 100
    np.testing.assert_array_equal(inner.enter(np.ones(2)), [1, 2])


@pytest.mark.parametrize("given", [[1e80, 1.0, 1.0], [1e-100, 1.0, 1.0], np.eye(3) * 1e80])
def test_what_the_dtype_cannot_hold_is_refused(given: Any) -> None:
    """Weights whose square roots single precision turns into infinity or zero are refused."""
    with pytest.raises(SettingError, match="beyond the range of float32"):
        Inner(np.asarray(given), 3, np.dtype("float32"))
