"""Angles, distances and unions of bases, against mpmath, worked cases and the whole feed."""

from __future__ import annotations

import functools
import re

import mpmath
import numpy as np
import pytest

from streambasis import (
    PrincipalBasis,
    StreamBasis,
    merge,
    principal_angles,
    subspace_distance,
)
from streambasis.errors import SettingError
from streambasis.samples import DTYPES
from tests.reference_principal import noisy_feed, normal, sine

ANGLE_ERROR = 2e-15
"""A few roundings of numbers of size one."""


def rotated(rng: np.random.Generator, angles: list[float], channels: int) -> tuple:
    """Return two sets of rows in a random frame with the given principal angles."""
    k = len(angles)
    frame = np.linalg.qr(rng.standard_normal((channels, channels)))[0].T
    a = frame[:k]
    b = np.cos(angles)[:, None] * a + np.sin(angles)[:, None] * frame[k : 2 * k]
    turn = np.linalg.qr(rng.standard_normal((k, k)))[0]
    return a, turn @ b


def exact_angles(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Return principal angles of real or complex rows to 60 digits, as doubles."""
    with mpmath.workdps(60):
        qs = []
        for rows in (a, b):
            columns = mpmath.matrix(rows.T.tolist())
            qs.append(mpmath.qr(columns, mode="skinny")[0])
        cosines = mpmath.svd_c(qs[0].transpose_conj() * qs[1], compute_uv=False)
        return np.sort([float(mpmath.acos(min(c, mpmath.mpf(1)))) for c in cosines])


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_tiny_and_nearly_right_angles_are_exact(dtype: str) -> None:
    """Angles of 1e-12 and pi/2 - 1e-12 beside others agree with mpmath to a few roundings.

    Björck & Golub (1973); scipy.linalg.subspace_angles loses the tiny one here.
    """
    rng = np.random.default_rng(1)
    angles = [1e-12, 1e-8, 0.3, np.pi / 4, 1.2, np.pi / 2 - 1e-8, np.pi / 2 - 1e-12]
    a, b = rotated(rng, angles, 16)
    if dtype == "complex128":
        phases = np.exp(2j * np.pi * rng.random(16))
        a, b = a * phases, b * phases
    found = principal_angles(a, b)
    np.testing.assert_allclose(found, exact_angles(a, b), rtol=0, atol=ANGLE_ERROR)
    np.testing.assert_allclose(found, angles, rtol=0, atol=ANGLE_ERROR)
    assert subspace_distance(a[:3], b[:3]) == pytest.approx(
        np.sin(principal_angles(a[:3], b[:3])[-1])
    )


def test_worked_example() -> None:
    """Two planes in space meet in a line: their angles are 0 and the angle of their normals."""
    tilt = np.deg2rad(30)
    a = [[1.0, 0.0, 0.0], [0.0, 1.0, 0.0]]
    b = [[2.0, 0.0, 0.0], [1.0, 3 * np.cos(tilt), 3 * np.sin(tilt)]]
    np.testing.assert_allclose(principal_angles(a, b), [0.0, tilt], atol=ANGLE_ERROR)
    assert subspace_distance(a, b) == pytest.approx(0.5)


def test_ranks_may_differ() -> None:
    """There are as many angles as the smaller rank; the distance of different ranks is 1."""
    rng = np.random.default_rng(2)
    a, b = rotated(rng, [0.1, 0.2, 0.3], 9)
    np.testing.assert_allclose(principal_angles(a, b[:1]), principal_angles(b[:1], a))
    assert len(principal_angles(a, b[:1])) == 1
    assert subspace_distance(a, a[:2]) == 1.0
    empty = StreamBasis(9)
    assert principal_angles(a, empty).shape == (0,)
    assert subspace_distance(empty, empty) == 0.0


def test_rows_need_not_be_orthonormal() -> None:
    """Scaled, mixed, doubled and zero rows give the angles of the span, whatever their size."""
    rng = np.random.default_rng(3)
    a, b = rotated(rng, [0.1, 1.0], 7)
    mixed = np.vstack([rng.standard_normal((3, 2)) @ a, np.zeros((1, 7))])
    for scale in (1.0, 1e-300, 1e300):
        np.testing.assert_allclose(principal_angles(mixed * scale, b), [0.1, 1.0], atol=1e-13)


def test_inner_products_decide_what_is_orthogonal() -> None:
    """Bases with one inner product are compared in it, arrays in that of the basis beside them."""
    rng = np.random.default_rng(4)
    root = rng.standard_normal((5, 5))
    inner = root @ root.T + 5 * np.eye(5)
    samples = rng.standard_normal((4, 5))
    a, b = StreamBasis(5, inner=inner), StreamBasis(5, inner=inner)
    a.push_many(samples[:2])
    b.push_many(samples[2:])
    lower = np.linalg.cholesky(inner)
    expected = principal_angles(samples[:2] @ lower, samples[2:] @ lower)
    np.testing.assert_allclose(principal_angles(a, b), expected, atol=1e-13)
    np.testing.assert_allclose(principal_angles(a, samples[2:]), expected, atol=1e-13)
    other = StreamBasis(5, inner=[1.0, 2.0, 3.0, 4.0, 5.0])
    with pytest.raises(SettingError, match=r"matrix \(.*and weights \(1, 2, 3, ...\)"):
        principal_angles(a, other)
    with pytest.raises(SettingError, match=r"Euclidean and weights"):
        subspace_distance(StreamBasis(5), other)


def test_channels_must_be_the_same() -> None:
    """Bases of other channels are refused by name."""
    with pytest.raises(SettingError, match=re.escape("2 (a, b) and 2 (a, c)")):
        principal_angles(StreamBasis(["a", "b"]), StreamBasis(["a", "c"]))
    with pytest.raises(SettingError, match="2 and of 3 channels"):
        principal_angles(np.eye(2), np.eye(3))


@pytest.mark.parametrize("parts", [2, 8, 64])
@pytest.mark.parametrize("centre", [False, True])
@pytest.mark.parametrize(("dtype", "bound"), [("float64", 1e-8), ("complex64", 1e-4)])
def test_principal_parts_merge_into_the_whole(
    parts: int, centre: bool, dtype: str, bound: float
) -> None:
    """Parts reduced in a chain or in a tree equal the basis of all samples."""
    rng = np.random.default_rng(5)
    feed, _ = noisy_feed(rng, 2000, 24, 4, 0.1, dtype)
    feed = feed + normal(rng, (24,), dtype)
    make = functools.partial(PrincipalBasis, 24, centre=centre, dtype=dtype, forget=0.999)
    whole = make()
    whole.push_many(feed)
    whole.flush()
    bases = []
    for piece in np.array_split(feed, parts):
        bases.append(make())
        bases[-1].push_many(piece)
    tree = bases
    while len(tree) > 1:
        tree = [merge(*tree[i : i + 2]) for i in range(0, len(tree), 2)]
    for merged in (merge(*bases), tree[0]):
        assert merged.rank == whole.rank
        assert merged.count == 2000
        assert sine(merged.vectors, whole.vectors) < bound
        np.testing.assert_allclose(merged.energies, whole.energies, rtol=bound)
        np.testing.assert_allclose(merged.noise, whole.noise, rtol=bound)
        np.testing.assert_allclose(merged.mean, whole.mean, atol=bound)
        np.testing.assert_allclose(merged.effective_count, whole.effective_count)
        assert merged.audit().orthogonality < 3


def test_merging_leaves_the_parts_alone_and_can_go_on() -> None:
    """The parts keep their samples; the merged basis takes more and stays that of the whole."""
    feed, _ = noisy_feed(np.random.default_rng(6), 500, 8, 2, 0.1)
    a, b, whole = (PrincipalBasis(8, block=16) for _ in range(3))
    a.push_many(feed[:99])
    b.push_many(feed[99:250])
    before = a.vectors
    merged = merge(a, b)
    assert a.count == 99
    np.testing.assert_array_equal(a.vectors, before)
    merged.push_many(feed[250:])
    whole.push_many(feed)
    merged.flush()
    whole.flush()
    np.testing.assert_allclose(merged.energies, whole.energies, rtol=1e-10)
    empty = PrincipalBasis(8, block=16)
    np.testing.assert_allclose(merge(empty, whole).energies, whole.energies, rtol=1e-12)
    np.testing.assert_allclose(merge(whole, empty).energies, whole.energies, rtol=1e-12)


@pytest.mark.parametrize("scale", [1e-200, 1e200])
def test_principal_parts_merge_at_any_scale(scale: float) -> None:
    """Parts whose squares leave the range of a double merge like any others."""
    feed, _ = noisy_feed(np.random.default_rng(7), 400, 8, 2, 0.1)
    plain, scaled = [], []
    for piece in np.split(feed, 2):
        plain.append(PrincipalBasis(8, centre=True))
        plain[-1].push_many(piece)
        scaled.append(PrincipalBasis(8, centre=True))
        scaled[-1].push_many(piece * scale)
    expected, actual = merge(*plain), merge(*scaled)
    assert actual.rank == expected.rank == 2
    assert sine(actual.vectors, expected.vectors) < 1e-12
    np.testing.assert_allclose(actual.mean / scale, expected.mean, rtol=1e-12)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("parts", [2, 8, 64])
def test_spans_merge_into_the_span_of_the_whole(parts: int, dtype: str) -> None:
    """The union spans what all samples span, and numbers its pivot samples over the parts."""
    rng = np.random.default_rng(8)
    samples = normal(rng, (256, 9), dtype) @ normal(rng, (9, 30), dtype)
    whole = StreamBasis(30, dtype=dtype)
    whole.push_many(samples)
    bases = []
    for piece in np.split(samples, parts):
        bases.append(StreamBasis(30, dtype=dtype))
        bases[-1].push_many(piece)
    merged = merge(*bases)
    assert merged.rank == whole.rank == 9
    assert merged.count == 256
    bound = {"float32": 1e-4, "complex64": 1e-4}.get(dtype, 1e-8)
    assert subspace_distance(merged, whole) < bound
    assert merged.audit().orthogonality < 3
    pivots = samples[merged.pivots]
    assert sine(np.linalg.qr(pivots.T)[0].T, merged.vectors) < bound


def test_merge_refuses_what_does_not_fit() -> None:
    """Other kinds, settings or a union beyond the capacity are refused with the way out."""
    full = [StreamBasis(4, capacity=1) for _ in range(2)]
    for basis, sample in zip(full, np.eye(4), strict=False):
        basis.push(sample)
    with pytest.raises(SettingError, match="larger capacity"):
        merge(*full)
    with pytest.raises(SettingError, match="window cannot be merged"):
        merge(StreamBasis(4), StreamBasis(4, window=8))
    with pytest.raises(TypeError, match="StreamBasis and a PrincipalBasis"):
        merge(StreamBasis(4), PrincipalBasis(4))
    with pytest.raises(SettingError, match="different dtype: float64 and float32"):
        merge(StreamBasis(4), StreamBasis(4, dtype="float32"))
    with pytest.raises(SettingError, match=r"different forget: 1.0 and 0.9"):
        merge(PrincipalBasis(4), PrincipalBasis(4, forget=0.9))
    with pytest.raises(SettingError, match=r"different centre: False and True"):
        merge(PrincipalBasis(4), PrincipalBasis(4, centre=True))
