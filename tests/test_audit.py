"""The audit measures what it says."""

from __future__ import annotations

import numpy as np
import pytest

from streambasis.audit import ORTHOGONALITY_LIMIT, orthogonality, unit_roundoff
from tests.reference import DTYPES, orthonormal_rows


def test_unit_roundoff_is_half_the_machine_epsilon() -> None:
    """2**-53 and 2**-24, as in LAPACK."""
    assert unit_roundoff(np.dtype("complex128")) == 2.0**-53
    assert unit_roundoff(np.dtype("float32")) == 2.0**-24


@pytest.mark.parametrize("dtype", DTYPES)
def test_householders_directions_pass(dtype: str) -> None:
    """LAPACK's own orthonormal rows are within the limit, at half of it when square."""
    rng = np.random.default_rng(1)
    for rows, count in ((1, 16), (16, 16), (20, 300)):
        assert orthogonality(orthonormal_rows(rng, rows, count, dtype)) < ORTHOGONALITY_LIMIT


def test_a_known_loss_is_measured() -> None:
    """Two unit vectors at a known angle give the known ratio; the 1-norm is a column sum."""
    loss = 1e-10
    rows = np.zeros((2, 20))
    rows[0, 0] = 1
    rows[1, :2] = loss, np.sqrt(1 - loss**2)
    assert orthogonality(rows) == pytest.approx(loss / (20 * 2.0**-53))
    assert orthogonality(rows[:, :4]) == pytest.approx(loss / (16 * 2.0**-53))
    assert orthogonality(np.empty((0, 5))) == 0
    assert orthogonality(2 * np.eye(1, 32)) == pytest.approx(3 / (32 * 2.0**-53))
