"""What a principal basis keeps to whatever it is fed: scale, silence, gaps, threads, settings."""

from __future__ import annotations

import concurrent.futures
import itertools
import pickle
import warnings

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from streambasis import PrincipalBasis
from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.errors import SampleError, SettingError
from streambasis.samples import DTYPES
from tests.reference_principal import batch, noisy_feed, normal, sine


def finite(scores) -> bool:
    """Say whether no field of the scores is NaN or infinite."""
    return all(np.isfinite(getattr(scores, f)).all() for f in ("norm", "residual", "spe", "t2"))


@given(
    exponent=st.integers(-990, 990),
    centre=st.booleans(),
    block=st.sampled_from([None, 1, 9]),
    channels=st.sampled_from([6, 70]),
)
@settings(max_examples=15, deadline=None)
def test_powers_of_two_change_no_direction(
    exponent: int, centre: bool, block: int | None, channels: int
) -> None:
    """Contract 8: a feed times 2**e has the same rank, T² and directions, and scaled norms."""
    feed, _ = noisy_feed(np.random.default_rng(1), 130, channels, 2, 0.1)
    scaled_feed = np.ldexp(feed, exponent)
    plain = PrincipalBasis(channels, centre=centre, block=block, max_rank=4, forget=0.99)
    scaled = PrincipalBasis(channels, centre=centre, block=block, max_rank=4, forget=0.99)
    expected, actual = plain.push_many(feed), scaled.push_many(scaled_feed)
    single = PrincipalBasis(channels, centre=centre, block=block, max_rank=4, forget=0.99)
    singles = [single.push(sample) for sample in scaled_feed]
    np.testing.assert_array_equal(scaled.vectors, plain.vectors)
    np.testing.assert_array_equal(single.vectors, plain.vectors)
    assert scaled.rank == plain.rank
    np.testing.assert_allclose(actual.t2, expected.t2, rtol=1e-9)
    np.testing.assert_allclose([s.t2 for s in singles], expected.t2, rtol=1e-9)
    for scores in (actual.residual, [s.residual for s in singles]):
        np.testing.assert_allclose(np.ldexp(scores, -exponent), expected.residual, rtol=1e-12)
    np.testing.assert_array_equal(np.ldexp(scaled.mean, -exponent), plain.mean)


@pytest.mark.parametrize("dtype", DTYPES)
def test_a_silent_feed_has_rank_zero(dtype: str) -> None:
    """Zeros from the start are scored as zeros against nothing."""
    basis = PrincipalBasis(5, dtype=dtype)
    scores = basis.push_many(np.zeros((1000, 5), dtype))
    basis.flush()
    assert finite(scores)
    assert (scores.t2 == 0).all()
    assert (scores.spe == 0).all()
    assert basis.rank == 0
    assert basis.noise == 0.0
    assert basis.vectors.shape == (0, 5)


@pytest.mark.parametrize("forget", [1.0, 0.7])
@pytest.mark.parametrize("centre", [False, True])
def test_a_feed_that_falls_silent_keeps_its_directions_until_forgotten(
    forget: float, centre: bool
) -> None:
    """Silence lowers the energies; under forgetting the directions go when nothing is left."""
    rng = np.random.default_rng(2)
    feed, _ = noisy_feed(rng, 400, 6, 2, 0.1)
    basis = PrincipalBasis(6, rank=2, forget=forget, centre=centre)
    basis.push_many(feed)
    before = basis.energies
    scores = basis.push_many(np.zeros((100, 6)))
    basis.flush()
    assert finite(scores)
    assert basis.rank == 2
    assert (basis.energies < before).all()
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
    scores = basis.push_many(np.zeros((5000, 6)))
    assert finite(scores)
    assert basis.rank == (2 if forget == 1.0 else 0)
    again = basis.push_many(feed)
    basis.flush()
    assert np.isfinite(again.spe).all()
    assert basis.rank == 2


@pytest.mark.parametrize("centre", [False, True])
@pytest.mark.parametrize("dtype", DTYPES)
def test_one_sample_repeated_is_one_direction(dtype: str, centre: bool) -> None:
    """The same sample for ever is one direction, or none about its mean, and no rounding grows."""
    rng = np.random.default_rng(3)
    sample = normal(rng, (40,), dtype) + 100
    basis = PrincipalBasis(40, dtype=dtype, centre=centre, block=8)
    for _ in range(4):
        scores = basis.push_many(np.tile(sample, (200, 1)))
        assert finite(scores)
    assert basis.rank == (0 if centre else 1)
    expected = 0.0 if centre else np.linalg.norm(sample.astype(complex)) ** 2
    assert basis.energies.sum() == pytest.approx(expected, rel=1e-5)
    assert basis.noise <= 1e-10 * np.abs(sample).max() ** 2
    limit = 64 * np.finfo(dtype).eps * np.linalg.norm(sample)
    assert basis.push(sample).residual <= limit


@pytest.mark.parametrize("dtype", DTYPES)
def test_a_scale_that_grows_a_millionfold_is_followed(dtype: str) -> None:
    """While the scale grows by 1e6 (and falls back) everything stays finite and right."""
    rng = np.random.default_rng(4)
    feed, rows = noisy_feed(rng, 2000, 20, 3, 0.01, dtype)
    growth = np.logspace(0, 6, 2000).astype(np.finfo(dtype).dtype)[:, None]
    basis = PrincipalBasis(20, rank=3, dtype=dtype, forget=0.99)
    for scaled in (feed * growth, feed * growth[::-1]):
        assert finite(basis.push_many(scaled))
        basis.flush()
        assert sine(basis.vectors, rows) < 0.01
        assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT


def test_nothing_warns() -> None:
    """Extremes of range, silence and rank raise no warning."""
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for value in (0.0, 5e-324, 1e-200, 1e200, 1.7e308):
            basis = PrincipalBasis(4, block=2)
            basis.push_many(np.full((5, 4), value))
            basis.flush()
            score = basis.push(np.full(4, value))
            assert not np.isnan(score[1:5]).any()
            assert not np.isnan([*basis.energies, basis.noise]).any()
            PrincipalBasis.from_state(basis.to_state())


def test_energies_are_variances_and_norms_are_about_the_mean() -> None:
    """Energies divide by the weights, SPE is the squared residual, T² the scaled coordinates."""
    rng = np.random.default_rng(5)
    feed, _ = noisy_feed(rng, 4096, 6, 2, 0.1)
    feed = feed + 7.0
    basis = PrincipalBasis(6, centre=True)
    basis.push_many(feed)
    basis.flush()
    sample = rng.standard_normal(6)
    residual, coordinates = basis.residual(sample), basis.coordinates(sample)
    expected_spe, mean = residual @ residual, basis.mean
    np.testing.assert_allclose(mean, feed.mean(axis=0), rtol=1e-12)
    np.testing.assert_allclose(basis.project(sample) + residual, sample, rtol=1e-12)
    variances = np.var((feed - mean) @ basis.vectors.T, axis=0)
    np.testing.assert_allclose(basis.energies, variances, rtol=1e-10)
    score = basis.push(sample)
    assert score.norm == pytest.approx(np.linalg.norm(sample - mean))
    assert score.spe == pytest.approx(expected_spe)
    assert score.residual == pytest.approx(np.sqrt(expected_spe))
    assert score.t2 == pytest.approx(np.sum(coordinates**2 / basis.energies))
    assert not basis.vectors.flags.writeable


@pytest.mark.parametrize("kind", ["weights", "matrix"])
@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_inner_products_are_applied_at_the_door(kind: str, dtype: str) -> None:
    """With M = LLᴴ the basis is that of the samples Lᴴx, with directions back in channel units."""
    rng = np.random.default_rng(6)
    feed, _ = noisy_feed(rng, 300, 8, 2, 0.1, dtype)
    root = normal(rng, (8, 8), dtype)
    inner = root @ root.conj().T + np.eye(8)
    if kind == "weights":
        inner = np.arange(1.0, 9.0)
    matrix = np.diag(inner) if kind == "weights" else inner
    lower = np.linalg.cholesky(matrix)
    entered = feed @ lower.conj()
    basis, plain = (PrincipalBasis(8, rank=2, dtype=dtype, inner=i) for i in (inner, None))
    scores, expected = basis.push_many(feed), plain.push_many(entered)
    basis.flush()
    plain.flush()
    np.testing.assert_allclose(scores.spe, expected.spe, rtol=1e-9)
    np.testing.assert_allclose(basis.energies, plain.energies, rtol=1e-12)
    vectors = basis.vectors
    np.testing.assert_allclose(vectors.conj() @ matrix @ vectors.T, np.eye(2), atol=1e-12)
    np.testing.assert_allclose(basis.residual(feed) @ lower.conj(), plain.residual(entered))
    single = PrincipalBasis(8, rank=2, dtype=dtype, inner=inner)
    np.testing.assert_allclose([single.push(s).spe for s in feed], scores.spe, rtol=1e-9)


@pytest.mark.parametrize("kind", ["euclidean", "weights", "matrix"])
@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_missing_channels_are_projected_out(kind: str, dtype: str) -> None:
    """Coordinates and residual of a sample with gaps solve the least squares problem.

    The oracle minimizes over coordinates and missing values together with numpy.linalg.lstsq.
    """
    rng = np.random.default_rng(7)
    feed, _ = noisy_feed(rng, 400, 9, 3, 0.1, dtype)
    root = normal(rng, (9, 9), dtype)
    inner = {
        "euclidean": None,
        "weights": np.arange(1.0, 10.0),
        "matrix": root @ root.conj().T + np.eye(9),
    }[kind]
    matrix = {"euclidean": np.eye(9), "weights": np.diag(np.arange(1.0, 10.0)), "matrix": inner}[
        kind
    ]
    lower = np.linalg.cholesky(matrix).conj()
    basis = PrincipalBasis(9, rank=3, dtype=dtype, inner=inner, centre=True)
    basis.take_many(feed)
    basis.flush()
    sample = feed[0].copy()
    sample[[2, 6]] = np.nan
    observed = np.where(np.isnan(sample), basis.mean, sample) - basis.mean
    unknowns = np.vstack([basis.vectors, np.eye(9)[[2, 6]]]) @ lower
    solution = np.linalg.lstsq(unknowns.T, observed @ lower, rcond=None)[0]
    rest = observed @ lower - solution @ unknowns
    score = basis.score_many(sample[None])[0]
    assert score.residual == pytest.approx(np.linalg.norm(rest))
    assert score.t2 == pytest.approx(np.sum(np.abs(solution[:3]) ** 2 / basis.energies))
    filled = sample.copy()
    filled[[2, 6]] = basis.mean[[2, 6]] - solution[3:]
    gapped, complete = (PrincipalBasis.from_state(basis.to_state()) for _ in range(2))
    assert gapped.push(sample)[1:5] == pytest.approx(score[1:5])
    complete.push(filled)
    for one in (gapped, complete):
        one.flush()
    np.testing.assert_allclose(gapped.energies, complete.energies, rtol=1e-12)


def test_undetermined_samples_are_scored_nan_and_not_folded() -> None:
    """Too few observed channels, or none that show a direction, are said so and change nothing."""
    rng = np.random.default_rng(8)
    feed, _ = noisy_feed(rng, 300, 6, 2, 0.05)
    feed[:, 5] = 30 * rng.standard_normal(300)
    basis = PrincipalBasis(6, rank=3)
    basis.take_many(feed)
    basis.flush()
    before = basis.to_state().parts["core"]
    blind, few, none = feed[:3].copy()
    blind[5] = few[[0, 1, 2, 3]] = none[:] = np.nan
    for sample in (blind, few, none):
        score = basis.push(sample)
        assert np.isnan([score.norm, score.residual, score.spe, score.t2]).all()
    basis.flush()
    assert basis.count == 303
    for name, array in basis.to_state().parts["core"].arrays.items():
        np.testing.assert_array_equal(array, before.arrays[name])


@pytest.mark.parametrize("centre", [False, True])
def test_feeds_with_gaps_score_and_fold_like_singles(centre: bool) -> None:
    """Gaps from the first sample on change nothing of contract 7, and hardly the subspace."""
    rng = np.random.default_rng(9)
    feed, rows = noisy_feed(rng, 3000, 12, 2, 0.1)
    feed[rng.random(feed.shape) < 0.05] = np.nan
    feed[17] = np.nan
    single, many = (PrincipalBasis(12, rank=2, centre=centre) for _ in range(2))
    scores = many.push_many(feed)
    singles = [single.push(sample) for sample in feed]
    np.testing.assert_allclose([s.spe for s in singles], scores.spe, rtol=1e-9)
    np.testing.assert_allclose(single.energies, many.energies, rtol=1e-9)
    assert np.isnan(scores.spe[17])
    assert np.isfinite(np.delete(scores.spe, 17)).mean() > 0.98
    many.flush()
    assert sine(many.vectors, rows) < 0.02


def test_a_channel_missing_from_the_start_is_taken_as_silent() -> None:
    """A channel never observed does not stop the basis; it has no part in any direction."""
    feed, _ = noisy_feed(np.random.default_rng(10), 300, 8, 2, 0.1)
    feed[:, 3] = np.nan
    basis = PrincipalBasis(8)
    assert finite(basis.push_many(feed))
    assert basis.rank == 2
    np.testing.assert_array_equal(basis.vectors[:, 3], 0.0)
    table = pa.table({str(i): pa.array(feed[:, i], from_pandas=True) for i in range(8)})
    nulls = PrincipalBasis(8)
    nulls.push_many(table)
    np.testing.assert_array_equal(nulls.vectors, basis.vectors)


def test_threads_never_corrupt_a_basis() -> None:
    """Four threads that push to one basis leave one that has seen every sample once."""
    feed, _ = noisy_feed(np.random.default_rng(11), 2000, 10, 2, 0.1)
    basis = PrincipalBasis(10, block=7)

    def push(rows: np.ndarray) -> list[int]:
        half = len(rows) // 2
        numbers = [basis.push(sample).sample for sample in rows[:half]]
        return numbers + basis.push_many(rows[half:]).sample.tolist()

    with concurrent.futures.ThreadPoolExecutor(4) as pool:
        numbers = sorted(itertools.chain(*pool.map(push, np.split(feed, 4))))
    basis.flush()
    assert numbers == list(range(2000))
    energies, vectors, _ = batch(feed)
    np.testing.assert_allclose(basis.energies, energies[:2], rtol=1e-10)
    assert sine(basis.vectors, vectors[:2]) < 1e-10


def test_memory_does_not_grow_with_the_run() -> None:
    """Contract 11: nbytes is the same after a thousand samples as after ten thousand."""
    rng = np.random.default_rng(12)
    basis = PrincipalBasis(80, max_rank=4)
    basis.take_many(rng.standard_normal((1000, 80)))
    before = basis.nbytes
    basis.take_many(rng.standard_normal((9000, 80)))
    assert basis.nbytes == before
    assert before >= 80 * 8 * (basis.block + basis.max_rank)


@pytest.mark.parametrize(
    ("given", "said"),
    [
        ({"rank": "aic"}, "noise"),
        ({"rank": 0}, "rank=0"),
        ({"rank": 9}, "rank=9"),
        ({"rank": True}, "rank=True"),
        ({"rank": 4, "max_rank": 3}, "above max_rank=3"),
        ({"max_rank": 9}, "max_rank=9"),
        ({"forget": 0.0}, "forget=0.0"),
        ({"forget": 1.5}, "forget=1.5"),
        ({"forget": 0.9, "half_life": 5}, "one of the two"),
        ({"half_life": 0.0}, "half_life=0.0"),
        ({"half_life": float("nan")}, "half_life=nan"),
        ({"block": 0}, "block=0"),
        ({"block": 2.5}, "block=2.5"),
        ({"dtype": "int64"}, "int64"),
    ],
)
def test_settings_out_of_range_are_named(given: dict, said: str) -> None:
    """A wrong setting is refused with its name, its value and the range."""
    with pytest.raises(SettingError) as refused:
        PrincipalBasis(8, **given)
    assert said in str(refused.value)


def test_values_too_large_for_a_mean_are_refused_alike() -> None:
    """Above a quarter of the range a distance from the mean may not exist: refused either way."""
    basis = PrincipalBasis(3, centre=True)
    for call, sample in ((basis.push, [1e308, 0, 0]), (basis.push_many, [[1e308, 0, 0]])):
        with pytest.raises(SampleError, match="quarter"):
            call(sample)
    assert basis.count == 0


def test_half_life_is_the_age_of_half_the_weight() -> None:
    """half_life in samples is forget = 0.5 ** (1 / half_life)."""
    assert PrincipalBasis(3, half_life=10).forget == pytest.approx(0.5**0.1)


def test_a_pickled_basis_goes_on_the_same() -> None:
    """Pickling, as a process pool does it, keeps all: the copy scores bit for bit alike."""
    basis = PrincipalBasis(12, half_life=500.0, centre=True)
    samples, _ = noisy_feed(np.random.default_rng(5), 400, 12, 3, 0.1)
    basis.push_many(samples[:250])  # a block is left half full
    again = pickle.loads(pickle.dumps(basis))
    expected, actual = basis.push_many(samples[250:]), again.push_many(samples[250:])
    for name in ("norm", "residual", "spe", "t2", "rank"):
        np.testing.assert_array_equal(getattr(actual, name), getattr(expected, name))
    np.testing.assert_array_equal(again.vectors, basis.vectors)
