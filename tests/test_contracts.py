"""The contracts of the growing basis, as properties over drawn streams."""

from __future__ import annotations

import copy
import pickle
import threading
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from streambasis import StreamBasis
from streambasis.audit import ORTHOGONALITY_LIMIT, unit_roundoff
from streambasis.errors import SampleError, SampleTypeError
from streambasis.state import State
from tests.reference import DTYPES, SlowBasis, epsilon, orthonormal_rows, random_rows

BATCH_TOLERANCE = 1e-12
"""Difference allowed between a batch and single pushes, of the norm, in double precision; in single
precision the same number of roundings."""


@st.composite
def streams(draw: Callable[..., Any], *, gap: bool = False) -> tuple[NDArray[Any], dict[str, Any]]:
    """Draw a stream and the settings of its basis.

    With a gap every sample is at least ten times beyond or below its tolerance; otherwise there
    are samples at every distance from the span, repetitions, zeros and huge and tiny ones.
    """
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    dtype = draw(st.sampled_from(DTYPES))
    count = draw(st.integers(1, 40))
    rank = draw(st.integers(1, count))
    length = draw(st.integers(1, 60))
    mixing = random_rows(rng, length, rank, dtype)
    if not gap:
        mixing = mixing * (10.0 ** rng.uniform(-12, 0, (length, rank))).astype(mixing.real.dtype)
    mixing[rng.random((length, rank)) < draw(st.sampled_from([0.0, 0.5, 0.9]))] = 0
    samples = mixing @ orthonormal_rows(rng, rank, count, dtype)
    samples[rng.random(length) < 0.2] = samples[0]
    settings: dict[str, Any] = {"dtype": dtype}
    if not gap:
        settings["rtol"] = draw(st.sampled_from([None, 0.0, 1e-3, 0.3]))
        settings["capacity"] = draw(st.sampled_from([None, 1, max(1, count // 2)]))
        samples[rng.random(length) < 0.1] = 0
    kind = draw(st.sampled_from(["none", "weights", "matrix"]))
    if kind == "weights":
        settings["inner"] = rng.uniform(0.5, 2.0, count)
    elif kind == "matrix":
        root = random_rows(rng, count, count, "complex128" if "c" in dtype else "float64")
        settings["inner"] = root @ root.conj().T / count + np.eye(count)
    return np.ascontiguousarray(samples), settings


def made(samples: NDArray[Any], settings: dict[str, Any]) -> StreamBasis:
    """Return a basis for a stream."""
    return StreamBasis(samples.shape[1], **settings)


def same_state(one: State, other: State) -> bool:
    """Whether two states are equal bit for bit."""
    return (
        one.kind == other.kind
        and one.facts == other.facts
        and one.arrays.keys() == other.arrays.keys()
        and all(one.arrays[n].tobytes() == other.arrays[n].tobytes() for n in one.arrays)
        and one.parts.keys() == other.parts.keys()
        and all(same_state(one.parts[n], other.parts[n]) for n in one.parts)
    )


@given(streams(), st.sampled_from(["nan", "inf", "short", "long", "text", "matrix", "none"]))
def test_refused_input_changes_nothing(drawn: Any, fault: str) -> None:
    """Contract 1: whatever is refused, alone or inside a batch, leaves every bit as it was."""
    samples, settings = drawn
    basis = made(samples, settings)
    basis.push_many(samples)
    before = basis.to_state()
    good = np.ones(samples.shape[1], samples.dtype)
    bad: Any = {
        "nan": np.where(np.arange(len(good)) == len(good) - 1, np.nan, good),
        "inf": np.where(np.arange(len(good)) == 0, np.inf, good),
        "short": good[:-1],
        "long": np.append(good, 1),
        "text": ["x"] * len(good),
        "matrix": np.ones((2, len(good), 2)),
        "none": None,
    }[fault]
    with pytest.raises((SampleError, SampleTypeError)) as caught:
        basis.push(bad)
    assert "sample" in str(caught.value)
    with pytest.raises((SampleError, SampleTypeError)):
        basis.push_many([good, bad] if fault != "matrix" else bad)
    assert same_state(before, basis.to_state())


def test_complex_samples_of_a_real_basis_are_refused() -> None:
    """Contract 1: a complex value for a real basis is an error that names the way out."""
    basis = StreamBasis(2)
    with pytest.raises(SampleTypeError, match="dtype='complex128'"):
        basis.push([1j, 2.0])
    assert basis.count == 0


@given(streams())
def test_directions_stay_orthonormal(drawn: Any) -> None:
    """Contract 2: the ratio stays below 3, in the inner product, whatever was pushed."""
    samples, settings = drawn
    basis = made(samples, settings)
    for sample in samples[::2]:
        basis.push(sample)
    basis.push_many(samples)
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
    inner = settings.get("inner")
    vectors = basis.vectors.astype("complex128")
    weighted = (
        vectors if inner is None else vectors * inner if inner.ndim == 1 else vectors @ inner.T
    )
    loss = np.abs(weighted.conj() @ vectors.T - np.eye(basis.rank)).sum(axis=0).max(initial=0)
    spread = 1.0 if inner is None else np.linalg.cond(np.diag(inner) if inner.ndim == 1 else inner)
    size = max(16, samples.shape[1])
    assert loss < (ORTHOGONALITY_LIMIT + spread) * size * unit_roundoff(basis.dtype)


@given(streams())
def test_every_sample_lies_within_its_tolerance(drawn: Any) -> None:
    """Contract 3: what was not too much for the capacity is within its tolerance, for ever."""
    samples, settings = drawn
    if "inner" in settings:
        del settings["inner"]
    basis = made(samples, settings)
    decisions = basis.push_many(samples)
    norms = np.linalg.norm(basis.residual(samples).astype("complex128"), axis=1)
    rounding = 8 * epsilon(samples.dtype) * np.linalg.norm(samples.astype("complex128"), axis=1)
    answered = decisions.reason != "full"
    assert (norms[answered] <= decisions.tolerance[answered] + rounding[answered]).all()
    audit = basis.audit()
    assert audit.coverage <= 1
    assert audit.uncovered == (~answered).sum()


@given(streams(gap=True))
def test_spans_are_nested(drawn: Any) -> None:
    """Contracts 5 and 6: the first k directions span what the first k accepted samples span."""
    samples, settings = drawn
    settings.pop("inner", None)
    basis = made(samples, settings)
    decisions = basis.push_many(samples)
    accepted = samples[decisions.grew].astype("complex128")
    np.testing.assert_array_equal(basis.pivots, np.flatnonzero(decisions.grew))
    vectors = basis.vectors.astype("complex128")
    for k in range(1, basis.rank + 1):
        rest = accepted[:k] - accepted[:k] @ vectors[:k].conj().T @ vectors[:k]
        size = np.linalg.norm(accepted[:k], axis=1)
        assert (np.linalg.norm(rest, axis=1) <= 16 * epsilon(samples.dtype) * size).all()


@given(streams(gap=True))
def test_decisions_are_those_of_extended_precision(drawn: Any) -> None:
    """Where there is a gap every decision is that of a slow basis in extended precision."""
    samples, settings = drawn
    settings.pop("inner", None)
    basis = made(samples, settings)
    rtol = epsilon(samples.dtype) ** 0.5
    slow = SlowBasis(samples.shape[1], rtol, 0.0, samples.shape[1])
    for sample in samples:
        decision, (reason, left, tolerance) = basis.push(sample), slow.push(sample)
        norm = max(decision.norm, 1e-300)
        assert decision.tolerance == pytest.approx(tolerance, rel=1e-5)
        assert abs(decision.residual - left) <= 1e3 * epsilon(samples.dtype) * norm
        if tolerance / 10 < left < tolerance * 10:
            return  # the draw closed the gap: from here on both may differ
        assert decision.reason == reason


@given(streams(), st.integers(1, 60))
def test_batches_decide_like_singles(drawn: Any, cut: int) -> None:
    """Contract 7: a batch, cut anywhere, decides as single pushes do, and leaves their basis."""
    samples, settings = drawn
    one, other = made(samples, settings), made(samples, settings)
    singles = [one.push(sample) for sample in samples]
    batches = [*other.push_many(samples[:cut]), *other.push_many(samples[cut:])]
    assert len(singles) == len(batches)
    roundings = BATCH_TOLERANCE / epsilon("float64") * epsilon(samples.dtype)
    for single, batch in zip(singles, batches, strict=True):
        bound = roundings * single.norm
        if single.reason != batch.reason:
            assert abs(single.residual - single.tolerance) <= bound
            return  # from here on the two have different bases
        assert (single.sample, single.grew, single.rank) == (batch.sample, batch.grew, batch.rank)
        assert abs(single.residual - batch.residual) <= bound
        assert single.norm == pytest.approx(batch.norm, rel=roundings)
    assert one.vectors.tobytes() == other.vectors.tobytes()


def test_long_batches_decide_like_singles() -> None:
    """Contract 7 over several blocks, with growths inside of them, at capacity and beyond."""
    rng = np.random.default_rng(21)
    for dtype in DTYPES:
        sources = random_rows(rng, 12, 24, dtype)
        mixing = random_rows(rng, 3000, 12, dtype)
        for source in range(12):
            mixing[: 230 * source, source] = 0
        samples = mixing @ sources
        for capacity in (None, 7):
            one = StreamBasis(24, dtype=dtype, capacity=capacity)
            other = StreamBasis(24, dtype=dtype, capacity=capacity)
            batch = other.push_many(samples)
            singles = [one.push(sample) for sample in samples]
            assert [d.reason for d in singles] == list(batch.reason)
            assert [d.rank for d in singles] == list(batch.rank)
            residuals = np.array([d.residual for d in singles])
            roundings = BATCH_TOLERANCE / epsilon("float64") * epsilon(dtype)
            assert (np.abs(residuals - batch.residual) <= roundings * batch.norm).all()
            assert other.rank == (capacity or 12)
            assert other.audit().uncovered == (batch.reason == "full").sum()


@given(streams(), st.integers(-60, 60))
def test_powers_of_two_change_nothing(drawn: Any, power: int) -> None:
    """Contract 8: samples times a power of two give the same decisions and directions."""
    samples, settings = drawn
    settings.pop("inner", None)
    parts = samples.view(samples.real.dtype)
    parts[np.abs(parts) < 1e-15] = 0  # so that nothing is lost below the least number
    far = np.ldexp(parts, power).view(samples.dtype)
    one, other = made(samples, settings), made(samples, settings)
    for near_sample, far_sample in zip(samples, far, strict=True):
        near_decision, far_decision = one.push(near_sample), other.push(far_sample)
        assert near_decision.reason == far_decision.reason
        assert np.ldexp(near_decision.residual, power) == far_decision.residual
    np.testing.assert_array_equal(one.vectors, other.vectors)


@given(streams(), st.integers(0, 59), st.sampled_from(["state", "pickle", "copy"]))
def test_a_restart_is_invisible(drawn: Any, cut: int, way: str) -> None:
    """Contract 9: taken down and set up again, all that follows is the same bit by bit."""
    samples, settings = drawn
    basis = made(samples, settings)
    basis.push_many(samples[:cut])
    state = basis.to_state()
    other = {
        "state": lambda: StreamBasis.from_state(state),
        "pickle": lambda: pickle.loads(pickle.dumps(basis)),
        "copy": lambda: copy.deepcopy(basis),
    }[way]()
    for sample in samples[cut : cut + 3]:
        assert basis.push(sample) == other.push(sample)
    expected, found = basis.push_many(samples[cut + 3 :]), other.push_many(samples[cut + 3 :])
    assert list(expected) == list(found)
    assert same_state(basis.to_state(), other.to_state())
    assert same_state(state, StreamBasis.from_state(state).to_state())


def test_threads_share_an_object() -> None:
    """Contract 10: pushes of two threads and readers are each a whole; none is lost."""
    rng = np.random.default_rng(5)
    samples = random_rows(rng, 400, 12) @ random_rows(rng, 12, 48)
    basis = StreamBasis(48)
    numbers: list[int] = []
    faults: list[BaseException] = []

    def push(rows: NDArray[Any]) -> None:
        try:
            for row in rows[:300]:
                numbers.append(basis.push(row).sample)
            numbers.extend(basis.push_many(rows[300:]).sample)
            basis.coordinates(rows[:5])
            assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
        except BaseException as fault:
            faults.append(fault)

    threads = [threading.Thread(target=push, args=(samples[i:],)) for i in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not faults
    assert sorted(numbers) == list(range(basis.count))
    assert basis.rank == 12
    assert basis.audit().coverage <= 1


def test_a_sample_that_another_thread_writes_to_cannot_slip_through() -> None:
    """Contract 10: a value that turns to NaN while it is pushed is refused or not seen at all."""
    basis = StreamBasis(64, capacity=8)
    sample = np.ones(64)
    stop = threading.Event()

    def spoil() -> None:
        while not stop.is_set():
            sample[33] = np.nan
            sample[33] = 1.0

    thread = threading.Thread(target=spoil)
    thread.start()
    refused = 0
    try:
        for _ in range(3000):
            try:
                basis.push(sample)
            except SampleError:
                refused += 1
    finally:
        stop.set()
        thread.join()
    assert basis.count + refused == 3000
    assert np.isfinite(basis.vectors).all()


def test_nothing_grows_with_the_run() -> None:
    """Contract 11: the bytes held are the bytes of the arrays, and pushes do not change them."""
    rng = np.random.default_rng(6)
    basis = StreamBasis(32, capacity=10)
    samples = random_rows(rng, 2000, 32)
    basis.push_many(samples)
    held = basis.nbytes
    assert held >= 10 * 32 * 8
    for sample in samples[:200]:
        basis.push(sample)
    basis.push_many(samples)
    assert basis.nbytes == held
    state = basis.to_state().parts["core"]
    assert sum(array.nbytes for array in state.arrays.values()) <= held
