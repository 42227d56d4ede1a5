"""Both ways to fold a block, against plain NumPy; what they do when LAPACK gives up."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
import pytest

from streambasis import PrincipalBasis, StreambasisError
from streambasis.audit import ORTHOGONALITY_LIMIT, orthogonality
from streambasis.core_svd import by_rotations, core_spectrum
from streambasis.errors import NumericalError, SnapshotError
from streambasis.folding import Subspace
from streambasis.kernels import principal as kernels
from streambasis.measuring import measure
from streambasis.one_pass import NEWCOMERS, QUIET, one_pass_turn
from streambasis.samples import DTYPES
from streambasis.turning import Stack
from streambasis.weighing import Weights
from tests.reference_principal import batch, noisy_feed, normal, nystrom, same, sine

pytestmark = pytest.mark.kernels

ROUNDING = {"float32": 1e-4, "complex64": 1e-4, "float64": 1e-11, "complex128": 1e-11}
CHANNELS, HELD, SAMPLES = 50, 12, 90


def started(
    rng: np.random.Generator, dtype: str
) -> tuple[Stack, np.ndarray, np.ndarray, np.ndarray]:
    """Return a stack with directions, their singular values, a mean, and the next samples."""
    feed, _ = noisy_feed(rng, 1000 + SAMPLES, CHANNELS, 4, 0.2, dtype)
    energies, vectors, _ = batch(feed[:1000])
    stack = np.zeros((HELD + 2 * (HELD + NEWCOMERS), CHANNELS), dtype)
    stack[:HELD] = vectors[:HELD]
    work = np.zeros(CHANNELS, dtype), np.zeros(len(stack), dtype)
    mean = (0.1 * normal(rng, (CHANNELS,), dtype)).astype(dtype)
    return Stack(stack, HELD, *work), np.sqrt(1000 * energies[:HELD]), mean, feed[1000:] + mean


def folded(stack: Stack, before: np.ndarray, samples: np.ndarray, weights: Weights):
    """Return the one-pass turn of samples about zero, or None."""
    squares = (np.abs(samples) ** 2).sum(axis=1).astype(np.float64)
    block = measure(samples, squares, stack.rows[: stack.held])
    floors = 32 * np.finfo(samples.dtype).eps * np.sqrt(squares)
    return one_pass_turn(stack, before, block, weights, floors, 4)


@pytest.mark.parametrize("centred", [False, True])
@pytest.mark.parametrize("forget", [1.0, 0.99])
@pytest.mark.parametrize("dtype", DTYPES)
def test_one_pass_is_the_nystrom_approximation(dtype: str, forget: float, centred: bool) -> None:
    """Turn and singular values are those of the approximation formed as full matrices.

    What is missed makes up the trace: the squares of block and directions are all accounted for.
    """
    rng = np.random.default_rng(1)
    stack, before, mean, samples = started(rng, dtype)
    weights = Weights(SAMPLES, forget, 1000.0, centred)
    deviations = samples - mean
    turn = folded(stack, before, deviations, weights)
    assert turn is not None
    top = turn.rotation.shape[1] // 2
    rows = weights.apply(deviations.astype(np.result_type(dtype, np.float64)))
    energies, vectors, trace = nystrom(stack.rows[:top], before, rows)
    bound = ROUNDING[dtype]
    np.testing.assert_allclose(turn.singular**2, energies, rtol=bound)
    turned = turn.rotation[:HELD].astype(dtype) @ stack.rows[: 2 * top]
    for k in (1, 2, 4):
        assert sine(turned[:k].astype(vectors.dtype), vectors[:k]) < bound
    assert orthogonality(turned) < ORTHOGONALITY_LIMIT
    assert (turn.singular**2).sum() + turn.missed == pytest.approx(trace, rel=bound)


def test_one_pass_turns_like_an_exact_fold_within_its_bound() -> None:
    """Its directions differ from those of the SVD of everything by QUIET of the turn at most."""
    rng = np.random.default_rng(2)
    for _ in range(20):
        stack, before, _, samples = started(rng, "float64")
        turn = folded(stack, before, samples, Weights(SAMPLES, 1.0, 1000.0, False))
        assert turn is not None
        old = stack.rows[:HELD].copy()
        turned = turn.rotation[:4] @ stack.rows[: turn.rotation.shape[1]]
        _, _, exact = np.linalg.svd(np.vstack([before[:, None] * old, samples]))
        assert sine(turned, exact[:4]) <= QUIET * sine(old[:4], exact[:4])


def test_loud_blocks_are_left_to_the_exact_fold() -> None:
    """A block with a new strong source, or beside energies too far apart, takes an exact fold."""
    rng = np.random.default_rng(3)
    stack, before, _, samples = started(rng, "float64")
    weights = Weights(SAMPLES, 1.0, 1000.0, False)
    loud = samples + 30 * np.outer(rng.standard_normal(SAMPLES), rng.standard_normal(CHANNELS))
    assert folded(stack, before, loud, weights) is None
    assert folded(stack, np.where(np.arange(HELD) < 11, before, 1e-6), samples, weights) is None
    assert folded(stack, before, samples, weights) is not None


@pytest.mark.parametrize("noise", [1e-4, 1e-2, 0.5])
@pytest.mark.parametrize(("dtype", "centre"), [("float64", False), ("complex128", True)])
def test_noise_and_energies_stay_right_over_many_folds(
    dtype: str, centre: bool, noise: float
) -> None:
    """After dozens of one-pass folds energies are those of the SVD of all samples, to 1e-4, and
    the noise variance is right to 2 %, however small it is.
    """
    rng = np.random.default_rng(10)
    feed, _ = noisy_feed(rng, 10_000, 96, 3, noise, dtype)
    basis = PrincipalBasis(96, max_rank=6, dtype=dtype, centre=centre, block=256)
    basis.take_many(feed)
    basis.flush()
    energies, _, _ = batch(feed, 1.0, centre)
    assert basis.rank == 3
    np.testing.assert_allclose(basis.energies, energies[:3], rtol=1e-4)
    assert basis.noise == pytest.approx(noise**2, rel=0.02)
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT


@pytest.mark.parametrize("block", [64, None])
def test_a_jump_is_followed_as_by_exact_folds(
    monkeypatch: pytest.MonkeyPatch, block: int | None
) -> None:
    """A subspace that jumps, by more directions than one pass looks out for, is acquired alike.

    Before the jump blocks are folded in one pass, from it on exactly until the new sources stand.
    """
    assert NEWCOMERS < 8
    rng = np.random.default_rng(1)
    feeds = [noisy_feed(rng, 3000, 128, 8, 0.3) for _ in range(2)]
    ways: list[str] = []

    def watched(self: Subspace, *args: Any) -> bool:
        quick = usual(self, *args)
        ways.append("quick" if quick else "exact")
        return quick

    usual = Subspace._fold_at_once
    found = {}
    for name, fold in (("quick", watched), ("exact", lambda *_: False)):
        monkeypatch.setattr(Subspace, "_fold_at_once", fold)
        basis = PrincipalBasis(128, rank=8, half_life=400.0, block=block)
        for feed, rows in feeds:
            for piece in np.split(feed, 10):
                basis.take_many(piece)
                found.setdefault(name, []).append(sine(basis.vectors, rows))
            ways.append("end")
    before, after = (part.split() for part in " ".join(ways).split("end")[:2])
    assert before[-3:] == after[-3:] == ["quick"] * 3
    assert "exact" in after
    np.testing.assert_allclose(found["quick"], found["exact"], rtol=0.02)


@pytest.mark.parametrize("dtype", DTYPES)
def test_residuals_of_samples_near_the_basis_do_not_cancel(dtype: str) -> None:
    """However little of a sample is outside, its residual is right to some epsilons of its norm."""
    rng = np.random.default_rng(4)
    feed, _ = noisy_feed(rng, 2000, 100, 3, 0.1, dtype)
    basis = PrincipalBasis(100, rank=3, dtype=dtype)
    basis.take_many(feed)
    basis.flush()
    directions = basis.vectors
    inside = normal(rng, (64, 3), dtype) @ directions
    outside = basis.residual(normal(rng, (64, 100), dtype))
    outside /= np.linalg.norm(outside, axis=1, keepdims=True)
    parts = np.logspace(-8, 1, 64)
    samples = (inside + parts.astype(inside.real.dtype)[:, None] * outside).astype(dtype)
    scores = basis.score_many(samples)
    wide = samples.astype(np.result_type(dtype, np.float64))
    rest = wide - (wide @ directions.conj().T) @ directions
    error = np.abs(scores.residual - np.linalg.norm(rest, axis=1))
    assert (error <= 100 * np.finfo(dtype).eps * scores.norm).all()


@pytest.mark.parametrize("channels", [20, 100])
def test_where_an_array_lies_changes_no_bit(channels: int) -> None:
    """Samples whose memory starts at any multiple of eight bytes leave the same basis."""
    feed, _ = noisy_feed(np.random.default_rng(5), 700, channels, 3, 0.1)
    bases = []
    for shift in range(8):
        raw = np.empty(feed.size + 16)
        start = (-raw.ctypes.data % 64) // 8 + shift
        moved = raw[start : start + feed.size].reshape(feed.shape)
        moved[...] = feed
        # what is allocated on the way lies elsewhere too
        kept = [np.empty(8 * shift + 1) for _ in range(100)]
        basis = PrincipalBasis(channels, max_rank=4, centre=True, forget=0.999)
        scores = basis.push_many(moved)
        bases.append((basis, scores.spe.tobytes(), len(kept)))
    for basis, spe, _ in bases[1:]:
        assert spe == bases[0][1]
        assert same(basis, bases[0][0])


@contextmanager
def failing(monkeypatch: pytest.MonkeyPatch, *names: str) -> Iterator[None]:
    """Let functions of numpy.linalg fail to converge."""

    def fail(*_: object, **__: object) -> None:
        raise np.linalg.LinAlgError("did not converge")

    with monkeypatch.context() as patch:
        for name in names:
            patch.setattr(np.linalg, name, fail)
        yield


@pytest.mark.parametrize(
    "broken", [("svd",), ("eigh",), ("cholesky",), ("svd", "eigh", "cholesky")]
)
@pytest.mark.parametrize("channels", [16, 80])
def test_a_decomposition_that_fails_is_done_another_way(
    monkeypatch: pytest.MonkeyPatch, channels: int, broken: tuple[str, ...]
) -> None:
    """Where LAPACK does not converge the basis is still that of the SVD of all samples."""
    rng = np.random.default_rng(6)
    feed = rng.standard_normal((200, 6)) @ rng.standard_normal((6, channels))
    energies, vectors, _ = batch(feed)
    with failing(monkeypatch, *broken):
        basis = PrincipalBasis(channels, rank=6, block=40)
        basis.push_many(feed)
    np.testing.assert_allclose(basis.energies, energies[:6], rtol=1e-10)
    assert sine(basis.vectors, vectors[:6]) < 1e-10


@pytest.mark.parametrize("dtype", DTYPES)
def test_gaps_are_filled_whatever_fails_to_converge(
    monkeypatch: pytest.MonkeyPatch, dtype: str
) -> None:
    """Scores of samples with missing channels do not depend on LAPACK's convergence."""
    feed, _ = noisy_feed(np.random.default_rng(11), 300, 12, 3, 0.1, dtype)
    basis = PrincipalBasis(12, rank=3, dtype=dtype)
    basis.take_many(feed)
    basis.flush()
    feed[::3, [2, 7]] = np.nan
    expected = basis.score_many(feed)
    with failing(monkeypatch, "eigh"):
        scores = basis.score_many(feed)
    np.testing.assert_allclose(scores.spe, expected.spe, rtol=ROUNDING[dtype])
    np.testing.assert_allclose(scores.t2, expected.t2, rtol=ROUNDING[dtype])


@pytest.mark.parametrize("push", ["push", "push_many"])
def test_a_fold_that_fails_leaves_its_block_out(monkeypatch: pytest.MonkeyPatch, push: str) -> None:
    """The error says which samples are left out; the basis is as before and goes on."""
    feed, _ = noisy_feed(np.random.default_rng(7), 96, 8, 2, 0.1)
    basis = PrincipalBasis(8, block=32)
    basis.push_many(feed[:32])
    before = basis.to_state().parts["core"].arrays
    with failing(monkeypatch, "svd", "eigh"):
        monkeypatch.setattr(kernels, "rotate_orthogonal", lambda *_: kernels.UNUSUAL)
        if push == "push":
            basis.push_many(feed[32:63])
        last = feed[63] if push == "push" else feed[32:64]
        with pytest.raises(NumericalError, match="32 samples up to number 63 are left out"):
            getattr(basis, push)(last)
    for name, array in basis.to_state().parts["core"].arrays.items():
        np.testing.assert_array_equal(array, before[name])
    basis.push_many(feed[64:])
    other = PrincipalBasis(8, block=32)
    other.push_many(np.vstack([feed[:32], feed[64:]]))
    np.testing.assert_array_equal(basis.vectors, other.vectors)
    assert basis.count == 96


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_rotations_give_the_singular_values(dtype: str) -> None:
    """Wide, tall, rank-deficient and graded cores agree with numpy.linalg.svd."""
    rng = np.random.default_rng(8)
    for shape in ((5, 9), (12, 7), (1, 1)):
        core = normal(rng, shape, dtype) * np.logspace(0, -6, shape[1])
        core[:, -1] = core[:, 0]
        singular, rows = by_rotations(core)
        expected = np.linalg.svd(core)[1]
        np.testing.assert_allclose(singular, expected, atol=1e-14 * expected[0])
        np.testing.assert_allclose(rows @ rows.conj().T, np.eye(len(rows)), atol=1e-14)
        np.testing.assert_allclose((core @ rows.conj().T) @ rows, core, atol=1e-14)


@pytest.mark.parametrize("value", [np.inf, np.nan])
def test_a_core_that_is_not_finite_is_refused(value: float) -> None:
    """It is named as such, and nothing runs for ever."""
    coordinates = np.ones((3, 2))
    coordinates[1, 1] = value
    with pytest.raises(NumericalError, match="not finite"), np.errstate(invalid="ignore"):
        core_spectrum(np.array([2.0, 1.0]), coordinates, np.zeros((3, 0)), 2, True)


def test_a_state_keeps_what_is_held_and_how_blocks_grow() -> None:
    """Settings come back as they were, defaults of today or not; a limit out of range is named."""
    basis = PrincipalBasis(100, max_rank=5)
    state = basis.to_state()
    assert state.facts["limit"] == 13
    state.facts |= {"limit": 9, "block": 32}
    again = PrincipalBasis.from_state(state)
    assert again.block == 32
    feed, _ = noisy_feed(np.random.default_rng(9), 400, 100, 3, 0.1)
    again.push_many(feed)
    kept = again.to_state()
    assert kept.facts["limit"] == 9
    assert len(kept.parts["core"].arrays["singular"]) == 9
    del state.facts["limit"]
    assert PrincipalBasis.from_state(state).to_state().facts["limit"] == 13
    for wrong in (4, 101, "many"):
        state.facts["limit"] = wrong
        with pytest.raises(SnapshotError, match="limit="):
            PrincipalBasis.from_state(state)


def test_wide_feeds_wait_in_a_bounded_buffer() -> None:
    """The default block shrinks with the number of channels, and with the memory."""
    assert PrincipalBasis(32).block == 1024
    assert PrincipalBasis(32_768, rank=2).block == 64
    assert PrincipalBasis(32, half_life=1000).block == round(1000 / np.log(2) / 8)
    with pytest.raises(StreambasisError, match="block=0"):
        PrincipalBasis(32, block=0)
