"""The sliding window of StreamBasis: what it holds, what it forgets, what it says of both."""

from __future__ import annotations

import datetime as dt
import threading

import numpy as np
import pytest
import reference_window as reference

from streambasis import StreamBasis
from streambasis.errors import SampleError, SettingError, UnknownSampleError
from streambasis.snapshot import from_bytes, to_bytes

pytestmark = pytest.mark.kernels

DTYPES = ("float64", "float32", "complex128", "complex64")
EXACT = 1e-12
"""Subspaces from a few well-conditioned samples agree to this."""


def axis(channel: int, channels: int = 4, size: float = 1.0) -> np.ndarray:
    """Return a sample along one channel."""
    out = np.zeros(channels)
    out[channel] = size
    return out


def frozen(basis: StreamBasis) -> bytes:
    """Return all that a basis keeps, for comparisons bit by bit."""
    return to_bytes(basis)


def drawn(rng: np.random.Generator, shape: tuple[int, ...], dtype: str = "float64") -> np.ndarray:
    """Return normal samples of a dtype."""
    out = rng.standard_normal(shape)
    if np.dtype(dtype).kind == "c":
        out = out + 1j * rng.standard_normal(shape)
    return out.astype(dtype)


# --- what a window holds ---------------------------------------------------------------------


def test_a_window_forgets_by_count():
    """The oldest sample leaves for the newest, and takes the direction that only it needed."""
    basis = StreamBasis(4, window=2)
    first, second = basis.push(axis(0)), basis.push(axis(1))
    assert (first.rank, second.rank, second.expired, second.dropped) == (1, 2, 0, 0)
    third = basis.push(axis(2))
    assert (third.grew, third.rank, third.expired, third.dropped) == (True, 2, 1, 1)
    assert basis.members.tolist() == [1, 2]
    assert reference.distance(basis.vectors, np.eye(4)[[1, 2]]) < EXACT


def test_a_direction_stays_as_long_as_one_sample_needs_it():
    """When a pivot leaves, the newest sample that needs its direction takes over."""
    basis = StreamBasis(4, window=3)
    for sample in (axis(0), axis(0, size=-2.0), axis(0, size=3.0)):
        basis.push(sample)
    assert basis.pivots.tolist() == [0]
    before = basis.vectors
    decision = basis.push(axis(1))
    assert (decision.rank, decision.expired, decision.dropped) == (2, 1, 0)
    assert basis.pivots.tolist() == [2, 3]
    np.testing.assert_array_equal(basis.vectors[0], before[0])
    basis.push(axis(1))
    last = basis.push(axis(1))
    assert (last.rank, last.expired, last.dropped) == (1, 1, 1)


def test_a_window_forgets_by_time_and_its_edge_leaves():
    """A sample stays while its time is later than the newest less the span; just then it leaves."""
    basis = StreamBasis(4, span=2.0)
    basis.push(axis(0), at=10.0)
    basis.push(axis(1), at=10.0)
    basis.push(axis(2), at=11.999_999_999)
    assert basis.members.tolist() == [0, 1, 2]
    decision = basis.push(axis(3), at=12.0)
    assert (decision.expired, decision.dropped, decision.rank) == (2, 2, 2)
    assert basis.members.tolist() == [2, 3]
    late = basis.push(axis(0), at=1e6)
    assert (late.expired, late.dropped, late.rank) == (2, 2, 1)


def test_a_window_by_count_and_time_keeps_what_both_allow():
    """With window= and span= a sample leaves for whichever comes first."""
    basis = StreamBasis(4, window=3, span=dt.timedelta(seconds=10))
    for second in (0, 1, 2, 3):
        basis.push(axis(second % 4), at=second)
    assert basis.members.tolist() == [1, 2, 3]
    basis.push(axis(0), at=12.5)
    assert basis.members.tolist() == [3, 4]
    assert basis.window == 3
    assert basis.span == np.timedelta64(10, "s")


@pytest.mark.parametrize(
    ("earlier", "later", "texts"),
    [
        (5.5, 5.25, ("5.5", "5.25")),
        (7, 6.999, ("7", "6.999")),
        (
            dt.datetime(2024, 1, 1, 12),
            dt.datetime(2024, 1, 1, 11, 59),
            ("2024-01-01T12:00", "2024-01-01T11:59"),
        ),
        (
            np.datetime64("2024-01-01T00:00:01"),
            np.datetime64("2024-01-01T00:00:00"),
            ("2024-01-01T00:00:01", "2024-01-01T00:00:00"),
        ),
    ],
)
def test_a_stamp_that_runs_backwards_names_both_and_changes_nothing(earlier, later, texts):
    """One sample or a batch with a time before the one before it is refused as a whole."""
    basis = StreamBasis(2, span=60.0)
    basis.push([1.0, 0.0], at=earlier)
    before = frozen(basis)
    with pytest.raises(SampleError) as refused:
        basis.push([0.0, 1.0], at=later)
    assert all(text in str(refused.value) for text in texts)
    assert "sample 1" in str(refused.value)
    with pytest.raises(SampleError) as refused:
        basis.push_many([[0.0, 1.0], [1.0, 1.0], [2.0, 0.0]], at=[earlier, earlier, later])
    assert all(text in str(refused.value) for text in texts)
    assert "sample 3" in str(refused.value)
    assert frozen(basis) == before


def test_equal_stamps_are_fine():
    """Samples of one moment enter in their order and leave together."""
    basis = StreamBasis(4, span=1.0)
    decisions = basis.push_many(np.eye(4), at=[3.0, 3.0, 3.0, 3.0])
    assert decisions.rank.tolist() == [1, 2, 3, 4]
    assert basis.push(axis(0), at=4.0).expired == 4


def test_times_are_given_for_all_samples_or_for_none():
    """A span needs times; without one, a feed has them throughout or not at all."""
    timed = StreamBasis(2, span=1.0)
    with pytest.raises(SampleError, match="give at="):
        timed.push([1.0, 0.0])
    with pytest.raises(SampleError, match="give at="):
        timed.push_many([[1.0, 0.0]])
    counted = StreamBasis(2, window=3)
    counted.push([1.0, 0.0])
    for attempt in (lambda: counted.push([1.0, 0.0], at=1.0), lambda: counted.expire(before=1.0)):
        with pytest.raises(SampleError, match="at="):
            attempt()
    stamped = StreamBasis(2, window=3)
    stamped.push([1.0, 0.0], at=1.0)
    before = frozen(stamped)
    with pytest.raises(SampleError, match="no time"):
        stamped.push([1.0, 0.0])
    with pytest.raises(SampleError, match="no time"):
        stamped.push_many([[1.0, 0.0]])
    assert frozen(stamped) == before


def test_the_time_of_a_refused_sample_is_forgotten_with_it():
    """The first sample that is taken decides whether the feed has times."""
    basis = StreamBasis(2, window=3)
    with pytest.raises(SampleError):
        basis.push([np.nan, 1.0], at=5.0)
    basis.push([1.0, 0.0])
    basis.push([0.0, 1.0])
    with pytest.raises(SampleError, match="at="):
        basis.expire(before=100.0)
    assert basis.members.tolist() == [0, 1]


def test_a_refused_sample_leaves_the_window_as_it_was():
    """NaN, a wrong length and bad times change nothing, whatever would have left for the sample."""
    basis = StreamBasis(2, window=2, span=5.0)
    basis.push_many([[1.0, 0.0], [0.0, 1.0]], at=[0.0, 1.0])
    before = frozen(basis)
    for sample, at in (
        ([np.nan, 1.0], 100.0),
        ([1.0], 100.0),
        ([1.0, 2.0], float("nan")),
        ([1.0, 2.0], "noon"),
    ):
        with pytest.raises((ValueError, TypeError)):
            basis.push(sample, at=at)
    for samples, at in (
        ([[1.0, 1.0], [np.inf, 1.0]], [100.0, 101.0]),
        ([[1.0, 1.0], [2.0, 1.0]], [100.0]),
        ([[1.0, 1.0], [2.0, 1.0]], None),
    ):
        with pytest.raises((ValueError, TypeError)):
            basis.push_many(samples, at=at)
    assert frozen(basis) == before
    assert basis.push([1.0, 1.0], at=2.0).sample == 2


@pytest.mark.parametrize(
    "setting",
    [{"window": w} for w in (0, -3, 2.5, True, 2**62)] + [{"span": s} for s in (0, "an hour")],
)
def test_a_window_that_is_none_is_refused_by_name(setting):
    """The error names the setting and the value."""
    ((name, value),) = setting.items()
    with pytest.raises(SettingError, match=name) as refused:
        StreamBasis(3, **setting)
    assert repr(value) in str(refused.value)


# --- retract, expire ---------------------------------------------------------------------------


def test_any_sample_can_be_retracted():
    """A sample that is no pivot leaves no trace; a pivot leaves as if it had expired."""
    basis = StreamBasis(4, window=10)
    basis.push_many([axis(0), axis(1), axis(0, size=2.0), axis(2)])
    assert basis.retract(2) == 0
    assert basis.members.tolist() == [0, 1, 3]
    assert basis.retract(0) == 1
    assert reference.distance(basis.vectors, np.eye(4)[[1, 2]]) < EXACT
    assert basis.retract(np.int64(3)) == 1
    assert (basis.rank, basis.members.tolist(), basis.count) == (1, [1], 4)
    assert basis.retract(1) == 1
    assert (basis.rank, basis.vectors.shape, basis.pivots.tolist()) == (0, (0, 4), [])
    assert basis.push(axis(3)).sample == 4


def test_a_retracted_sample_gives_its_place_to_the_next():
    """``window`` is how many samples are kept: a place freed is filled before another leaves."""
    basis = StreamBasis(4, window=3)
    basis.push_many([axis(0), axis(1), axis(2)])
    basis.retract(1)
    assert basis.push(axis(3)).expired == 0
    assert basis.push(axis(3)).expired == 1
    assert basis.members.tolist() == [2, 3, 4]


def test_an_unknown_sample_is_told_from_one_that_has_left():
    """Both raise a KeyError with the number and the reason, and change nothing."""
    basis = StreamBasis(4, window=2)
    basis.push_many(np.eye(4)[:3])
    basis.retract(2)
    before = frozen(basis)
    for number, words in ((0, "left"), (2, "left"), (3, "never"), (-1, "never"), (2**70, "never")):
        with pytest.raises(UnknownSampleError, match=f"sample {number} .*{words}"):
            basis.retract(number)
    with pytest.raises(TypeError):
        basis.retract("0")
    assert isinstance(UnknownSampleError("x"), KeyError)
    assert frozen(basis) == before


def test_expire_forgets_what_is_older_than_a_time():
    """All samples stamped before the time leave, those stamped just then stay."""
    basis = StreamBasis(4, window=100)
    basis.push_many(np.eye(4), at=[1.0, 2.0, 2.0, 3.0])
    assert basis.expire(before=1.0) == 0
    assert basis.expire(before=2.0) == 1
    assert basis.expire(before=np.nextafter(3.0, 2.0) - 1e-9) == 2
    assert (basis.members.tolist(), basis.rank) == ([3], 1)
    assert basis.expire(before=1e9) == 1
    assert (basis.members.tolist(), basis.rank) == ([], 0)
    assert basis.expire(before=2e9) == 0
    with pytest.raises(SampleError, match="3"):
        basis.push(axis(0), at=2.5)
    assert basis.push(axis(0), at=3.0).rank == 1


def test_without_a_window_nothing_can_be_forgotten():
    """The error says what to make instead."""
    basis = StreamBasis(4)
    basis.push(axis(0))
    for attempt in (
        lambda: basis.retract(0),
        lambda: basis.expire(before=1.0),
        lambda: basis.members,
        lambda: basis.uncovered,
    ):
        with pytest.raises(SettingError, match="window="):
            attempt()
    assert basis.window is None
    assert basis.span is None


# --- pivots and explanations -------------------------------------------------------------------


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("shape", [None, "weights", "matrix"])
def test_a_sample_is_explained_by_samples_still_in_the_window(dtype, shape):
    """Pivots are in the window, and their samples times the weights give what the basis holds."""
    rng = np.random.default_rng(4)
    channels, kept = 6, 9
    inner = {
        None: None,
        "weights": rng.uniform(0.5, 2.0, channels),
        "matrix": np.eye(channels) + 0.3 * np.ones((channels, channels)),
    }[shape]
    basis = StreamBasis(channels, window=kept, dtype=dtype, inner=inner)
    sources = drawn(rng, (4, channels), dtype)
    samples = drawn(rng, (60, 4), dtype) @ sources * 2.0 ** rng.integers(-9, 9, (60, 1))
    samples = samples.astype(dtype)
    bound = 500 * np.finfo(dtype).eps
    for number, sample in enumerate(samples):
        basis.push(sample)
        assert set(basis.pivots) <= set(range(max(0, number - kept + 1), number + 1))
        numbers, weights, residual = basis.explain(sample)
        made = weights @ samples[numbers] + residual
        assert np.linalg.norm(made - sample) < bound * np.linalg.norm(sample) * 20
    numbers, weights, residual = basis.explain(samples[-5:])
    assert numbers.tolist() == basis.pivots.tolist()
    assert (weights.shape, residual.shape) == ((5, basis.rank), (5, channels))
    error = np.linalg.norm(weights @ samples[numbers] + residual - samples[-5:], axis=1)
    assert (error < 20 * bound * np.linalg.norm(samples[-5:], axis=1)).all()


# --- sizes and scales --------------------------------------------------------------------------


@pytest.mark.parametrize("channels", [1, 3, 8])
@pytest.mark.parametrize("kept", [1, 2, 3, 20])
def test_windows_shorter_and_longer_than_the_channels(channels, kept):
    """The rank is that of the window at every step, up to the shorter of both."""
    rng = np.random.default_rng(kept)
    basis = StreamBasis(channels, window=kept)
    assert basis.capacity == min(channels, kept)
    schedule = reference.Schedule(kept)
    for sample in drawn(rng, (5 * kept + 20, channels)):
        expired = schedule.push(sample)
        decision = basis.push(sample)
        assert decision.expired == expired
        expected = reference.factorize(schedule.matrix(channels), 1e-9)
        assert decision.rank == len(expected)
        assert reference.distance(expected, basis.vectors) < 1e-9
        assert decision.reason != "full"


def test_a_window_of_equal_samples_has_one_direction():
    """The pivot leaves again and again; another sample takes over each time."""
    basis = StreamBasis(5, window=4)
    sample = np.arange(1.0, 6.0)
    ranks = [basis.push(sample).rank for _ in range(50)]
    assert ranks == [1] * 50
    assert reference.distance(basis.vectors, sample[None] / np.linalg.norm(sample)) < EXACT


def test_a_window_of_zeros_is_empty_of_directions():
    """Zeros count as samples, take the place of others, and need nothing."""
    basis = StreamBasis(3, window=2)
    basis.push([1.0, 2.0, 3.0])
    reasons = [basis.push(np.zeros(3)).reason for _ in range(3)]
    assert reasons == ["zero"] * 3
    assert (basis.rank, basis.members.tolist()) == (0, [2, 3])
    assert basis.retract(2) == 0
    assert basis.audit().coverage == 0.0


def test_samples_ten_orders_of_magnitude_apart_count_alike():
    """Each sample is judged at its own size, so a tiny one holds its direction up."""
    rng = np.random.default_rng(3)
    samples = drawn(rng, (200, 6))
    plain, scaled = StreamBasis(6, window=4), StreamBasis(6, window=4)
    for number, sample in enumerate(samples):
        one, other = plain.push(sample), scaled.push(sample * 10.0 ** (5 * (number % 3) - 5))
        assert (one.grew, one.rank, one.dropped) == (other.grew, other.rank, other.dropped)
        assert reference.distance(plain.vectors, scaled.vectors) < EXACT


@pytest.mark.parametrize(("dtype", "power"), [("float64", 990), ("float32", 110),
                                              ("complex128", 990), ("complex64", 110)])  # fmt: skip
def test_a_power_of_two_changes_no_bit(dtype, power):
    """Decisions and directions are the same, bit for bit, from 2**-power to 2**power."""
    rng = np.random.default_rng(8)
    sources = drawn(rng, (5, 8), dtype)
    samples = (drawn(rng, (300, 5), dtype) * rng.integers(0, 2, (300, 5))) @ sources
    sides = [
        (StreamBasis(8, window=7, capacity=4, dtype=dtype), 0.5**power),
        (StreamBasis(8, window=7, capacity=4, dtype=dtype), 1.0),
        (StreamBasis(8, window=7, capacity=4, dtype=dtype), 2.0**power),
    ]
    for sample in samples.astype(dtype):
        answers = []
        for basis, factor in sides:
            decision = basis.push((sample * factor).astype(dtype))
            answers.append((decision.reason, decision.rank, decision.dropped, decision.passes))
        assert answers[0] == answers[1] == answers[2]
    np.testing.assert_array_equal(sides[0][0].vectors, sides[1][0].vectors)
    np.testing.assert_array_equal(sides[2][0].vectors, sides[1][0].vectors)


# --- capacity ------------------------------------------------------------------------------------


def test_uncovered_samples_are_reported_and_take_their_place():
    """Beyond the capacity a sample waits in the window, the oldest first, for a free direction."""
    basis = StreamBasis(6, window=4, capacity=2)
    reasons = [basis.push(axis(i, 6)).reason for i in range(4)]
    assert reasons == ["independent", "independent", "full", "full"]
    assert basis.uncovered.tolist() == [2, 3]
    assert basis.audit().uncovered == 2
    assert basis.audit().coverage <= 1.0
    decision = basis.push(np.zeros(6))
    assert (decision.expired, decision.dropped, decision.rank) == (1, 1, 2)
    assert basis.uncovered.tolist() == [3]
    assert basis.pivots.tolist() == [1, 2]
    assert reference.distance(basis.vectors, np.eye(6)[[1, 2]]) < EXACT
    assert basis.retract(2) == 1
    assert basis.uncovered.tolist() == []
    assert basis.pivots.tolist() == [1, 3]


def test_an_uncovered_sample_may_turn_out_covered():
    """When a waiting sample is let in, others along the same direction are covered with it."""
    basis = StreamBasis(6, window=8, capacity=1)
    basis.push(axis(0, 6))
    for size in (1.0, -3.0, 0.5):
        assert basis.push(axis(1, 6, size)).reason == "full"
    basis.push(axis(2, 6))
    assert basis.uncovered.tolist() == [1, 2, 3, 4]
    basis.retract(0)
    assert basis.uncovered.tolist() == [4]
    assert basis.pivots.tolist() == [1]
    assert basis.audit().coverage <= 1.0


def test_the_capacity_is_filled_at_every_step():
    """The rank is that of the window, cut at the capacity, whatever leaves in whatever order."""
    rng = np.random.default_rng(12)
    channels, kept, capacity = 7, 12, 3
    basis = StreamBasis(channels, window=kept, capacity=capacity)
    schedule = reference.Schedule(kept)
    for _ in range(2000):
        if schedule.samples and rng.random() < 0.3:
            number = int(rng.choice(list(schedule.samples)))
            basis.retract(number)
            del schedule.samples[number]
        else:
            sample = axis(int(rng.integers(0, channels)), channels, 2.0 ** int(rng.integers(-5, 5)))
            schedule.push(sample)
            basis.push(sample)
        matrix = schedule.matrix(channels)
        assert basis.rank == min(capacity, len(reference.factorize(matrix, 1e-9)))
        outside = np.linalg.norm(basis.residual(matrix), axis=1) > 1e-6 * np.abs(matrix).max(
            axis=1, initial=0.0
        )
        assert basis.uncovered.tolist() == np.array(list(schedule.samples))[outside].tolist()
    reference.laid_open(basis)


# --- batches, state, threads, memory -------------------------------------------------------------


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("setting", [{"window": 30}, {"span": 40.0}, {"window": 25, "span": 60.0},
                                     {"window": 40, "capacity": 3}])  # fmt: skip
def test_batches_decide_like_singles(dtype, setting):
    """push_many in blocks of any size gives the decisions of pushing one at a time."""
    rng = np.random.default_rng(17)
    channels, count = 8, 900
    sources = drawn(rng, (6, channels), dtype)
    active = rng.random((count, 6)) < np.where(np.arange(count) % 300 < 200, 0.9, 0.2)[:, None]
    active[:, 4:] &= rng.random((count, 2)) < 0.02
    samples = ((drawn(rng, (count, 6), dtype) * active) @ sources).astype(dtype)
    times = np.cumsum(rng.integers(0, 4, count)).astype(float)
    single, batch = (StreamBasis(channels, dtype=dtype, **setting) for _ in range(2))
    decisions = [single.push(x, at=t) for x, t in zip(samples, times, strict=True)]
    cuts = np.sort(rng.integers(0, count, 12))
    blocks = [
        batch.push_many(x, at=t)
        for x, t in zip(np.split(samples, cuts), np.split(times, cuts), strict=True)
    ]
    eps = np.finfo(dtype).eps
    for name in ("sample", "grew", "reason", "rank", "expired", "dropped"):
        joined = np.concatenate([getattr(b, name) for b in blocks])
        assert joined.tolist() == [getattr(d, name) for d in decisions], name
    norms = np.array([d.norm for d in decisions])
    left = np.concatenate([b.residual for b in blocks]) - [d.residual for d in decisions]
    assert (np.abs(left) <= 200 * eps * norms).all()
    assert batch.members.tolist() == single.members.tolist()
    assert batch.pivots.tolist() == single.pivots.tolist()
    assert reference.distance(single.vectors, batch.vectors) < 1e4 * eps


def test_a_batch_stays_a_block_while_the_basis_does_not_change():
    """Samples that fit are taken by matrix products; only those that change it go one by one."""
    rng = np.random.default_rng(2)
    basis = StreamBasis(16, window=500)
    sources = drawn(rng, (3, 16))
    basis.push_many(drawn(rng, (500, 3)) @ sources)
    steps = []
    step = basis._core.step
    basis._core.step = lambda sample: steps.append(1) or step(sample)
    decisions = basis.push_many(drawn(rng, (2000, 3)) @ sources)
    assert (decisions.expired == 1).all()
    assert (decisions.rank == 3).all()
    assert len(steps) == 0
    assert basis.pivots.min() >= 2000


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize(
    "setting", [{"window": 9}, {"span": 7.5, "capacity": 3}, {"window": 12, "inner": "matrix"}]
)
def test_save_load_and_go_on_is_bit_identical(dtype, setting):
    """At any point of a run a snapshot goes on exactly like the basis it was taken from."""
    rng = np.random.default_rng(23)
    channels = 6
    setting = dict(setting)
    if setting.get("inner") == "matrix":
        setting["inner"] = np.eye(channels) + 0.2
    basis = StreamBasis(channels, dtype=dtype, **setting)
    sources = drawn(rng, (5, channels), dtype)
    clock = 0.0
    for _ in range(40):
        samples = (drawn(rng, (9, 5), dtype) * (rng.random((9, 5)) < 0.4)) @ sources
        times = clock + np.cumsum(rng.integers(0, 3, 9))
        clock = times[-1]
        again = from_bytes(to_bytes(basis))
        for side in (basis, again):
            for x, t in zip(samples[:4].astype(dtype), times[:4], strict=True):
                side.push(x, at=t)
            side.push_many(samples[4:].astype(dtype), at=times[4:])
            side.retract(int(side.members[len(side.members) // 2]))
        assert frozen(again) == frozen(basis)
        assert again.window == basis.window
        assert again.span == basis.span
        basis = again


def test_two_threads_that_push_to_one_window_never_corrupt_it():
    """Samples from two threads are all counted and every invariant holds afterwards."""
    rng = np.random.default_rng(5)
    basis = StreamBasis(24, window=16)
    samples = drawn(rng, (2, 3000, 24))

    def run(own):
        for sample in own:
            decision = basis.push(sample)
            if decision.sample % 7 == 0:
                try:
                    basis.retract(decision.sample)
                except UnknownSampleError:
                    continue

    threads = [threading.Thread(target=run, args=(own,)) for own in samples]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert basis.count == 6000
    reference.laid_open(basis)


def test_memory_is_bounded_by_the_window_and_told():
    """Once the window is full nothing more is allocated, and nbytes is the sum of all arrays."""
    rng = np.random.default_rng(6)
    basis = StreamBasis(12, window=1000)
    basis.push_many(drawn(rng, (1500, 12)))
    full = basis.nbytes
    assert full == sum(array.nbytes for array in basis._core.arrays)
    assert full < 1000 * (12 * 8 + 80) * 1.4
    for _ in range(5):
        basis.push_many(drawn(rng, (1500, 12)))
        basis.push(drawn(rng, (12,)))
    assert basis.nbytes == full


def test_a_window_by_time_holds_what_the_span_holds():
    """Its memory follows the number of samples inside the span, and window= caps it."""
    free, capped = StreamBasis(2, span=10.0), StreamBasis(2, span=10.0, window=50)
    times = np.linspace(0.0, 9.0, 5000)
    for basis in (free, capped):
        basis.push_many(np.ones((5000, 2)), at=times)
    assert (len(free.members), len(capped.members)) == (5000, 50)
    assert free.nbytes > 20 * capped.nbytes
    held = free.nbytes
    free.push_many(np.ones((5000, 2)), at=times + 100.0)
    assert len(free.members) == 5000
    assert free.nbytes == held
