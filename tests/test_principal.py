"""PrincipalBasis against batch factorizations of the same samples, and the contracts."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from streambasis import PrincipalBasis, StreambasisError
from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.samples import DTYPES
from tests.reference_principal import batch, noisy_feed, normal, same, sine

pytestmark = pytest.mark.kernels

ROUNDING = {"float32": 2e-5, "float64": 1e-10, "complex64": 2e-5, "complex128": 1e-10}


@pytest.mark.parametrize("forget", [1.0, 0.99])
@pytest.mark.parametrize("centre", [False, True])
@pytest.mark.parametrize("dtype", DTYPES)
def test_equals_the_svd_of_all_samples(dtype: str, centre: bool, forget: float) -> None:
    """While no direction is cut, energies, directions and mean are those of one weighted SVD."""
    rng = np.random.default_rng(1)
    feed, _ = noisy_feed(rng, 1003, 24, 4, 0.1, dtype)
    feed = feed + normal(rng, (24,), dtype)
    basis = PrincipalBasis(24, dtype=dtype, centre=centre, forget=forget)
    basis.push_many(feed)
    basis.flush()
    energies, vectors, mean = batch(feed, forget, centre)
    bound = ROUNDING[dtype]
    rank = 4 if centre else 5
    assert basis.rank == rank
    np.testing.assert_allclose(basis.energies, energies[:rank], rtol=bound)
    assert sine(basis.vectors, vectors[:rank]) < bound
    np.testing.assert_allclose(basis.mean, mean, atol=bound)


@pytest.mark.parametrize("centre", [False, True])
@pytest.mark.parametrize("dtype", DTYPES)
def test_batches_score_and_fold_like_singles(dtype: str, centre: bool) -> None:
    """Samples pushed singly, in one batch or in ragged batches leave the same basis to the bit."""
    rng = np.random.default_rng(2)
    feed, _ = noisy_feed(rng, 300, 20, 3, 0.1, dtype)
    single, whole, ragged = (PrincipalBasis(20, dtype=dtype, centre=centre) for _ in range(3))
    scores = [single.push(sample) for sample in feed]
    many = whole.push_many(feed)
    for piece in np.split(feed, [1, 7, 100, 101, 250]):
        ragged.push_many(piece)
    assert same(single, whole)
    assert same(single, ragged)
    bound = ROUNDING[dtype] / 100
    norms = np.array([s.norm for s in scores])
    assert np.abs(np.array([s.residual for s in scores]) - many.residual).max() <= (
        bound * norms.max()
    )
    np.testing.assert_allclose([s.t2 for s in scores], many.t2, rtol=1e3 * bound)
    assert [s.rank for s in scores] == many.rank.tolist()
    assert [s.sample for s in scores] == many.sample.tolist() == list(range(300))


@given(
    cut=st.integers(0, 120),
    block=st.integers(1, 40),
    centre=st.booleans(),
    forget=st.sampled_from([1.0, 0.95]),
)
@settings(max_examples=25, deadline=None)
def test_restart_is_invisible(cut: int, block: int, centre: bool, forget: float) -> None:
    """A basis taken from a state goes on bit for bit like the one that never stopped."""
    feed, _ = noisy_feed(np.random.default_rng(3), 160, 8, 2, 0.1)
    going = PrincipalBasis(8, block=block, centre=centre, forget=forget)
    going.push_many(feed[:cut])
    again = PrincipalBasis.from_state(going.to_state())
    first, second = going.push_many(feed[cut:]), again.push_many(feed[cut:])
    assert same(going, again)
    assert first.spe.tobytes() == second.spe.tobytes()
    assert first.t2.tobytes() == second.t2.tobytes()


def test_scoring_alone_changes_nothing() -> None:
    """score_many gives the scores of the basis as it stands and leaves it bit for bit."""
    feed, _ = noisy_feed(np.random.default_rng(4), 300, 8, 2, 0.1)
    basis = PrincipalBasis(8)
    basis.take_many(feed[:100])
    before = PrincipalBasis.from_state(basis.to_state())
    scores = basis.score_many(feed[100:])
    assert same(basis, before)
    assert scores.sample.tolist() == list(range(100, 300))
    expected = np.linalg.norm(basis.residual(feed[100:]), axis=1)
    np.testing.assert_allclose(scores.residual, expected, rtol=1e-12)
    t2 = (basis.coordinates(feed[100:]) ** 2 / basis.energies).sum(axis=1)
    np.testing.assert_allclose(scores.t2, t2, rtol=1e-12)


@pytest.mark.parametrize("bad", [np.inf, -np.inf])
def test_refused_samples_change_nothing(bad: float) -> None:
    """A batch with one bad value names sample, channel and value, and changes nothing."""
    feed, _ = noisy_feed(np.random.default_rng(5), 100, 8, 2, 0.1)
    basis = PrincipalBasis([f"c{i}" for i in range(8)])
    basis.push_many(feed)
    before = PrincipalBasis.from_state(basis.to_state())
    feed[50, 3] = bad
    for call in (basis.push_many, basis.take_many, basis.score_many):
        with pytest.raises(StreambasisError, match=r"sample 150, channel 'c3': value -?inf"):
            call(feed)
    with pytest.raises(StreambasisError, match="sample 100, channel 'c3'"):
        basis.push(feed[50])
    with pytest.raises(StreambasisError, match="shape"):
        basis.push(feed[0, :5])
    assert same(basis, before)


@pytest.mark.parametrize("dtype", DTYPES)
def test_directions_stay_orthonormal(dtype: str) -> None:
    """Contract 2 holds over a thousand folds, cut and uncut, and renewals are counted."""
    rng = np.random.default_rng(6)
    for channels, rank in ((16, 4), (80, 6)):
        basis = PrincipalBasis(channels, rank=rank, block=4, forget=0.99, dtype=dtype)
        scales = np.logspace(0, -6, channels)
        for _ in range(4):
            basis.push_many(normal(rng, (1000, channels), dtype) * scales.astype(dtype))
            assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
        # where all directions are held every fold ends with a step that is not counted
        assert basis.audit().renewals > 0 or channels == 16


@pytest.mark.parametrize("spread", [1.5, 1.9, 2.1, 5.0])
def test_small_energies_are_right_beside_large_ones(spread: float) -> None:
    """Over a thousand folds every energy equals that of the SVD of all samples.

    Amplitudes of 10**-1.9 to 1 go through the Gram matrix of the core, wider ones through its SVD:
    1e-10 in either, and beyond that a few roundings of the largest amplitude at each fold.
    """
    rng = np.random.default_rng(7)
    turn = np.linalg.qr(rng.standard_normal((16, 16)))[0]
    amplitudes = np.logspace(0, -spread, 16)
    feed = (rng.standard_normal((4000, 16)) * amplitudes) @ turn
    basis = PrincipalBasis(16, rank=16, block=4)
    basis.take_many(feed)
    energies, vectors, _ = batch(feed)
    bound = max(1e-10, 1000 * 10 * np.finfo(float).eps * 10**spread)
    np.testing.assert_allclose(basis.energies, energies, rtol=bound)
    for k in (1, 4, 12):
        assert sine(basis.vectors[:k], vectors[:k]) < bound


@pytest.mark.parametrize("channels", [24, 200])
def test_a_feed_without_noise_keeps_every_direction(channels: int) -> None:
    """A feed of exact rank 9 is held exactly, by either rule and with any block."""
    rng = np.random.default_rng(8)
    feed = rng.standard_normal((500, 9)) @ rng.standard_normal((9, channels))
    energies, vectors, _ = batch(feed)
    for rule in ("noise", "mdl", 9):
        for block in (None, 1, 64):
            basis = PrincipalBasis(channels, rank=rule, max_rank=12, block=block)
            basis.take_many(feed)
            basis.flush()
            assert basis.rank == 9
            np.testing.assert_allclose(basis.energies, energies[:9], rtol=1e-10)
            assert sine(basis.vectors, vectors[:9]) < 1e-10
            assert basis.noise < 1e-25


def test_a_basis_says_at_a_prompt_how_far_it_is() -> None:
    """Its text tells channels, rank and samples."""
    basis = PrincipalBasis(4, rank=1, block=2)
    basis.push_many(np.eye(4)[:2])
    assert repr(basis) == "PrincipalBasis(4 channels, rank 1, 2 samples)"
