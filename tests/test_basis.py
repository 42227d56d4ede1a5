"""The public face of StreamBasis: what goes in, what comes out, and what is refused."""

from __future__ import annotations

from typing import Any

import duckdb
import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
import scipy.linalg

import streambasis
from streambasis import StreamBasis
from streambasis.errors import SampleError, SampleTypeError, SettingError, StreambasisError
from tests.reference import DTYPES, epsilon, orthonormal_rows, random_rows


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"rtol": 1.0}, "rtol=1.0"),
        ({"rtol": -1e-9}, "rtol=-1e-09"),
        ({"rtol": np.nan}, "rtol=nan"),
        ({"rtol": "small"}, "tolerances are numbers"),
        ({"atol": -1.0}, "atol=-1.0"),
        ({"atol": np.inf}, "atol=inf"),
        ({"capacity": 0}, "capacity=0"),
        ({"capacity": 4}, "from 1 to the number of channels (3)"),
        ({"capacity": 2.5}, "capacity=2.5"),
        ({"dtype": "int32"}, "one of float32, float64, complex64, complex128"),
        ({"dtype": "nonsense"}, "nonsense"),
        ({"reorthogonalize": "sometimes"}, "one of criterion, never, always"),
        ({"inner": [1.0, 2.0]}, "inner: shape (2,)"),
    ],
)
def test_settings_outside_their_range_are_refused(settings: dict[str, Any], message: str) -> None:
    """A setting that makes no sense raises an error that names it, its value and the range."""
    with pytest.raises(SettingError) as caught:
        StreamBasis(3, **settings)
    assert message in str(caught.value)
    assert isinstance(caught.value, StreambasisError)
    assert isinstance(caught.value, ValueError)


def test_reasons_and_their_order() -> None:
    """Zero, independent, dependent and full samples are called so, and counted."""
    basis = StreamBasis(3, capacity=2)
    samples = np.array([[0, 0, 0], [1, 0, 0], [2, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 0]], float)
    reasons = [basis.push(sample).reason for sample in samples]
    assert reasons == ["zero", "independent", "dependent", "independent", "full", "dependent"]
    assert (basis.count, basis.rank, basis.capacity, basis.window) == (6, 2, 2, None)
    assert list(basis.pivots) == [1, 3]
    audit = basis.audit()
    assert (audit.samples, audit.rank, audit.uncovered, audit.renewals) == (6, 2, 1, 0)
    batch = StreamBasis(3, capacity=2).push_many(samples)
    assert list(batch.reason) == reasons


def test_a_decision_carries_its_figures() -> None:
    """Norm, residual and tolerance are those of the sample in its own units."""
    basis = StreamBasis(2, rtol=0.1, atol=0.5)
    first = basis.push([30.0, 40.0])
    assert (first.sample, first.norm, first.residual, first.tolerance) == (0, 50.0, 50.0, 5.0)
    assert first.grew is True
    assert (first.rank, first.passes, first.expired, first.dropped) == (1, 1, 0, 0)
    second = basis.push([0.4, -0.3])
    assert second.tolerance == 0.5
    assert second.residual == pytest.approx(0.5)
    third = basis.push([3.2, -2.4])
    assert third.grew
    assert third.residual == pytest.approx(4.0)


@pytest.mark.parametrize("dtype", DTYPES)
def test_any_array_like_is_the_same_sample(dtype: str) -> None:
    """Lists, strided, read-only, reversed, misaligned and other-typed arrays decide alike."""
    rng = np.random.default_rng(1)
    sample = np.round(random_rows(rng, 1, 6, dtype)[0] * 8)
    wide = np.zeros(13, dtype)
    wide[::2][:6] = sample
    frozen = sample.copy()
    frozen.setflags(write=False)
    shifted = np.frombuffer(b"\0" + sample.tobytes(), np.uint8)[1:].view(dtype)
    versions: list[Any] = [
        sample,
        list(sample),
        tuple(sample),
        wide[:12:2],
        frozen,
        shifted,
        sample[::-1].copy()[::-1],
        sample.astype(sample.dtype.newbyteorder()),
    ]
    if sample.dtype.kind == "f":
        versions += [sample.astype(int), [int(x) for x in sample]]
    expected = StreamBasis(6, dtype=dtype).push(sample.copy())
    for version in versions:
        assert StreamBasis(6, dtype=dtype).push(version) == expected
        assert StreamBasis(6, dtype=dtype).push_many([version])[0] == expected


def test_pushed_arrays_are_left_alone_and_not_kept() -> None:
    """The basis neither writes to what it is given nor looks at it again."""
    samples = random_rows(np.random.default_rng(2), 20, 5)
    kept = samples.copy()
    basis = StreamBasis(5)
    basis.push_many(samples)
    basis.push(samples[0])
    basis.coordinates(samples)
    basis.explain(samples)
    np.testing.assert_array_equal(samples, kept)
    vectors = basis.vectors.copy()
    samples[:] = 7.0
    np.testing.assert_array_equal(basis.vectors, vectors)


def test_vectors_are_read_only_and_stay_as_they_were_handed_out() -> None:
    """Vectors cannot be written to, cost no copy while nothing grows, and survive growth."""
    rng = np.random.default_rng(3)
    basis = StreamBasis(40)
    for _ in range(8):
        basis.push(rng.standard_normal(40))
    early = basis.vectors
    assert basis.vectors is early
    with pytest.raises(ValueError, match="read-only"):
        early[0, 0] = 1.0
    kept = early.copy()
    for _ in range(20):
        basis.push(rng.standard_normal(40))
    np.testing.assert_array_equal(early, kept)
    np.testing.assert_array_equal(basis.vectors[:8], kept)
    basis.renew()
    np.testing.assert_array_equal(early, kept)


def frames() -> list[Any]:
    """Return one batch as each library hands it out, columns in another order and one more."""
    columns = {
        "extra": [9.0, 9.0, 9.0],
        "flow": [1.0, 2.0, 0.0],
        "inlet": [3.0, 6.0, 1.0],
    }
    batch = pa.table(columns)
    assert batch.num_rows == 3  # duckdb finds it by its name
    return [
        batch,
        batch.to_batches()[0],
        pl.DataFrame(columns),
        pd.DataFrame(columns),
        duckdb.sql("select * from batch").arrow(),
        pl.DataFrame(columns).with_columns(pl.all().cast(pl.Float32)),
        pd.DataFrame(columns).astype("int64"),
    ]


@pytest.mark.parametrize("place", range(7))
def test_arrow_batches_are_matched_by_name(place: int) -> None:
    """pyarrow, polars, pandas and duckdb batches go in as they are, whatever their order."""
    frame = frames()[place]
    basis = StreamBasis(["inlet", "flow"])
    decisions = basis.push_many(frame)
    assert list(decisions.reason) == ["independent", "dependent", "independent"]
    assert decisions.norm[0] == pytest.approx(np.sqrt(10))
    frame = frames()[place]
    np.testing.assert_allclose(basis.coordinates(frame) @ basis.vectors, [[3, 1], [6, 2], [1, 0]],
                               atol=1e-12)  # fmt: skip


def test_arrow_batches_that_do_not_fit_are_refused() -> None:
    """Missing, doubled, null and textual columns are named; nothing is taken."""
    basis = StreamBasis(["a", "b"])
    doubled = pa.Table.from_arrays([pa.array([1.0])] * 3, names=["a", "b", "a"])
    for batch, message in (
        (pa.table({"a": [1.0]}), "column 'b' is missing"),
        (doubled, "column 'a' comes 2 times"),
        (pa.table({"a": [1.0, None], "b": [1.0, 2.0]}), "column 'a', row 1"),
        (pa.table({"a": [1.0], "b": [float("nan")]}), "sample 0, channel 'b'"),
    ):
        with pytest.raises(SampleError) as caught:
            basis.push_many(batch)
        assert message in str(caught.value)
    with pytest.raises(SampleTypeError, match="column 'b'"):
        basis.push_many(pa.table({"a": [1.0], "b": ["x"]}))
    assert basis.count == 0


def test_decisions_of_a_batch_are_columns() -> None:
    """A batch answers with one array per field, rows as decisions, and an Arrow batch."""
    basis = StreamBasis(2)
    decisions = basis.push_many([[1.0, 0.0], [2.0, 0.0]])
    assert len(decisions) == 2
    assert decisions[1] == list(decisions)[1]
    assert decisions[1].reason == "dependent"
    batch = decisions.to_arrow()
    assert batch.schema.names == list(decisions[0]._fields)
    assert batch.column("grew").to_pylist() == [True, False]
    empty = basis.push_many(np.empty((0, 2)))
    assert len(empty) == 0
    assert empty.to_arrow().num_rows == 0
    assert basis.count == 2


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("kind", ["none", "weights", "matrix"])
def test_inner_products_are_those_of_the_factorization(dtype: str, kind: str) -> None:
    """Directions are orthonormal in the inner product, and norms are measured in it."""
    rng = np.random.default_rng(4)
    count, rank = 12, 5
    inner: Any = None
    matrix = np.eye(count)
    if kind == "weights":
        inner = rng.uniform(0.5, 4, count)
        matrix = np.diag(inner)
    elif kind == "matrix":
        root = random_rows(rng, count, count, "complex128" if "c" in dtype else "float64")
        inner = matrix = root @ root.conj().T + count * np.eye(count)
    samples = random_rows(rng, rank, count, dtype)
    basis = StreamBasis(count, dtype=dtype, inner=inner)
    decisions = basis.push_many(samples)
    wide = samples.astype("complex128")
    norms = np.sqrt(np.einsum("ij,jk,ik->i", wide.conj(), matrix, wide).real)
    bound = 200 * epsilon(dtype)
    np.testing.assert_allclose(decisions.norm, norms, rtol=bound)
    vectors = basis.vectors.astype("complex128")
    gram = vectors.conj() @ matrix @ vectors.T
    assert np.abs(gram - np.eye(rank)).max() < bound
    x = random_rows(rng, 3, count, dtype)
    inside, outside = basis.project(x), basis.residual(x)
    np.testing.assert_allclose(inside + outside, x, atol=bound * 10)
    assert np.abs(vectors.conj() @ matrix @ outside.astype("complex128").T).max() < 20 * bound
    # <v, x> = vᴴ M x
    np.testing.assert_allclose(basis.coordinates(x), (vectors.conj() @ matrix @ x.T).T,
                               atol=20 * bound)  # fmt: skip
    np.testing.assert_allclose(basis.triangular @ basis.vectors, samples, atol=20 * bound)


@pytest.mark.parametrize("dtype", DTYPES)
def test_projection_splits_a_sample_in_two(dtype: str) -> None:
    """project + residual is x, the residual has no coordinates, and shapes follow x."""
    rng = np.random.default_rng(5)
    basis = StreamBasis(20, dtype=dtype)
    basis.push_many(random_rows(rng, 6, 20, dtype))
    before = basis.count
    x = random_rows(rng, 4, 20, dtype)
    bound = 16 * epsilon(dtype) * np.linalg.norm(x)
    assert np.abs(basis.project(x) + basis.residual(x) - x).max() <= bound
    assert np.abs(basis.coordinates(basis.residual(x))).max() <= bound
    assert basis.coordinates(x[0]).shape == (6,)
    assert basis.coordinates(list(x[0])).shape == (6,)
    np.testing.assert_allclose(basis.coordinates(x[0]), basis.coordinates(x)[0], atol=bound)
    assert basis.project(x[0]).shape == basis.residual(x[0]).shape == (20,)
    assert basis.coordinates(np.empty((0, 20))).shape == (0, 6)
    assert basis.coordinates(x).dtype == basis.project(x).dtype == np.dtype(dtype)
    assert basis.count == before
    with pytest.raises(SampleError):
        basis.coordinates(np.ones(19))
    with pytest.raises(SampleError):
        basis.residual(np.full((2, 20), np.nan))


def test_an_empty_basis_answers() -> None:
    """Before the first sample everything is outside, and all shapes are right."""
    basis = StreamBasis(3)
    assert basis.vectors.shape == (0, 3)
    assert basis.triangular.shape == (0, 0)
    assert basis.pivots.shape == (0,)
    assert basis.coordinates([1.0, 2.0, 3.0]).shape == (0,)
    np.testing.assert_array_equal(basis.residual([1.0, 2.0, 3.0]), [1, 2, 3])
    ids, weights, residual = basis.explain([1.0, 2.0, 3.0])
    assert len(ids) == len(weights) == 0
    np.testing.assert_array_equal(residual, [1, 2, 3])
    audit = basis.audit()
    assert (audit.orthogonality, audit.coverage, audit.condition) == (0, 0, 1)
    basis.renew()


@pytest.mark.parametrize("dtype", DTYPES)
def test_samples_are_explained_by_the_pivot_samples(dtype: str) -> None:
    """The weights are those of least squares on the pivot samples as they were pushed."""
    rng = np.random.default_rng(6)
    pushed = random_rows(rng, 5, 16, dtype)
    pushed[1] *= 1e6
    pushed[2] *= 1e-6
    basis = StreamBasis(16, dtype=dtype)
    basis.push(np.zeros(16))
    basis.push_many(pushed)
    x = random_rows(rng, 3, 16, dtype)
    ids, weights, residual = basis.explain(x)
    np.testing.assert_array_equal(ids, [1, 2, 3, 4, 5])
    wide = pushed.astype("complex128" if "c" in dtype else "float64")
    size = np.linalg.norm(wide, axis=1)
    expected = scipy.linalg.lstsq((wide / size[:, None]).T, x.astype(wide.dtype).T)[0].T
    assert np.abs(weights * size - expected).max() <= 200 * epsilon(dtype)
    np.testing.assert_allclose(weights @ wide + residual, x, atol=100 * epsilon(dtype))
    one = basis.explain(x[0])
    np.testing.assert_allclose(one[1], weights[0], rtol=1e-3)
    assert one[2].shape == (16,)


@pytest.mark.parametrize("power", [-1000, 1000])
def test_explanations_at_the_ends_of_the_range(power: int) -> None:
    """Weights and projections are right for samples of 1e±300 on a basis of samples near 1."""
    rng = np.random.default_rng(7)
    pushed = random_rows(rng, 4, 9)
    basis = StreamBasis(9)
    basis.push_many(pushed)
    x = np.ldexp(np.array([1.0, 2.0, 0.0, -1.0]) @ pushed, power)
    _, weights, residual = basis.explain(x)
    np.testing.assert_allclose(np.ldexp(weights, -power), [1, 2, 0, -1], atol=1e-13)
    assert np.abs(np.ldexp(residual, -power)).max() < 1e-14
    np.testing.assert_allclose(basis.project(x), x, rtol=1e-13)
    other = StreamBasis(9)
    other.push_many(np.ldexp(pushed, power))
    np.testing.assert_allclose(
        np.ldexp(other.explain(pushed[0])[1], power), [1, 0, 0, 0], atol=1e-13
    )


def test_norms_beyond_the_range_are_infinite_and_decided_rightly() -> None:
    """A norm above the largest number is reported as infinity, one below the least as 0."""
    basis = StreamBasis(4)
    largest = np.finfo(float).max
    first = basis.push(np.full(4, largest))
    assert (first.norm, first.grew) == (np.inf, True)
    assert basis.push(np.full(4, -largest / 3)).reason == "dependent"
    np.testing.assert_allclose(basis.vectors, [[0.5] * 4])
    subnormal = basis.push([5e-324, 0.0, 0.0, 0.0])
    assert subnormal.reason == "independent"
    assert subnormal.tolerance == 0.0
    assert basis.audit().orthogonality < 3


@pytest.mark.parametrize("dtype", DTYPES)
def test_renewing_keeps_span_order_and_pivots(dtype: str) -> None:
    """A renewal is counted, keeps the pivot samples and what they are combined of."""
    rng = np.random.default_rng(8)
    samples = random_rows(rng, 9, 30, dtype)
    basis = StreamBasis(30, dtype=dtype)
    basis.push_many(samples)
    vectors = basis.vectors.copy()
    basis.renew()
    audit = basis.audit()
    assert audit.renewals == 1
    assert audit.orthogonality < 1
    assert np.abs(basis.vectors - vectors).max() < 50 * epsilon(dtype)
    assert np.abs(basis.triangular @ basis.vectors - samples).max() < 100 * epsilon(dtype)
    assert basis.push(samples[3]).reason == "dependent"
    assert basis.push(random_rows(rng, 1, 30, dtype)[0]).grew


def test_a_lost_basis_is_repaired_by_renewal() -> None:
    """A basis grown without reorthogonalization fails its audit, and passes after a renewal."""
    columns = scipy.linalg.hilbert(10)
    basis = StreamBasis(10, rtol=0.0, reorthogonalize="never")
    basis.push_many(columns)
    assert basis.audit().orthogonality > 3
    basis.renew()
    assert basis.audit().orthogonality < 3
    np.testing.assert_allclose(basis.triangular @ basis.vectors, columns, atol=1e-14)


def test_condition_is_that_of_the_scaled_pivot_samples() -> None:
    """The audit reports the condition number of pivot samples scaled to norm 1."""
    columns = orthonormal_rows(np.random.default_rng(9), 3, 10)
    pushed = np.array([columns[0] * 1e8, columns[0] + 1e-3 * columns[1], columns[2] * 1e-5])
    basis = StreamBasis(10)
    basis.push_many(pushed)
    scaled = pushed / np.linalg.norm(pushed, axis=1)[:, None]
    assert basis.audit().condition == pytest.approx(np.linalg.cond(scaled), rel=1e-6)


def test_policies_cost_what_they_say() -> None:
    """ "always" makes two passes over every sample, "never" one, the criterion what it needs."""
    rng = np.random.default_rng(10)
    samples = random_rows(rng, 50, 10)
    passes = {}
    for policy in ("always", "never", "criterion"):
        basis = StreamBasis(10, reorthogonalize=policy)
        passes[policy] = [d.passes for d in basis.push_many(samples)]
    assert set(passes["always"]) == {2}
    assert set(passes["never"]) == {1}
    assert passes["criterion"][0] == 1
    assert set(passes["criterion"][10:]) == {1}


def test_counts_beyond_32_bits() -> None:
    """Sample numbers go on past 2**32 without wrapping."""
    basis = StreamBasis(3)
    basis.push([1.0, 0.0, 0.0])
    basis._core.integers[0] = 2**40
    assert basis.push([0.0, 1.0, 0.0]).sample == 2**40
    assert list(basis.push_many([[0.0, 1.0, 1.0]]).sample) == [2**40 + 1]
    assert list(basis.pivots) == [0, 2**40, 2**40 + 1]


def test_names_and_words() -> None:
    """Channels have names; the repr says what there is; the package lists its names."""
    basis = StreamBasis(["x", "y"])
    assert basis.channels == ("x", "y")
    assert StreamBasis(2).channels == ("0", "1")
    assert repr(basis) == "StreamBasis(2 channels, rank 0 of at most 2, 0 samples, float64)"
    with pytest.raises(SampleError, match="sample 0, channel 'y': value nan"):
        basis.push([1.0, np.nan])
    assert set(streambasis.__all__) <= set(dir(streambasis))
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        streambasis.nothing  # noqa: B018
