"""Restart is invisible: an object that was saved and loaded goes on as if it never stopped."""

from __future__ import annotations

import io
import os
import tempfile
from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import polars as pl
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

import streambasis
from streambasis.errors import SnapshotError
from streambasis.kernels import exchange
from streambasis.kernels.growth import CAPACITY, COUNT
from streambasis.snapshot import from_bytes, load, save, state_from_bytes, to_bytes
from streambasis.state import State

CHANNELS = 6
ANY_LENGTH = {
    ("PrincipalBasis", "block"),
    ("Model", "first_vectors"),
    ("SpeLimit", "excesses"),
    ("SpeLimit", "roots"),
    ("OpenEvent", "rows"),
    ("OpenEvent", "directions"),
}
"""Arrays that may hold as many rows as they like, such as samples that wait for their block."""
Samples = NDArray[Any]


def deterministic(rng: np.random.Generator, count: int, dtype: str) -> Samples:
    """Return samples of a rank that changes, with exact repeats, zeros and every size."""
    complex_valued = np.dtype(dtype).kind == "c"
    directions = rng.normal(size=(CHANNELS, CHANNELS))
    if complex_valued:
        directions = directions + 1j * rng.normal(size=(CHANNELS, CHANNELS))
    rank = rng.integers(1, CHANNELS + 1, size=count)
    out = np.zeros((count, CHANNELS), dtype)
    for i in range(count):
        if i and rng.random() < 0.2:
            out[i] = out[rng.integers(i)]
        elif rng.random() < 0.95:
            out[i] = rng.normal(size=rank[i]) @ directions[: rank[i]] * 10.0 ** rng.integers(-8, 8)
    return out


def noisy(rng: np.random.Generator, count: int, dtype: str) -> Samples:
    """Return two sources and noise."""
    samples = rng.normal(size=(count, 2)) @ rng.normal(size=(2, CHANNELS)) * 5
    samples = samples + rng.normal(size=(count, CHANNELS)) + 3
    if np.dtype(dtype).kind == "c":
        samples = samples * np.exp(1j * rng.normal(size=(count, 1)))
    return samples.astype(dtype)


def stream_basis(rng: np.random.Generator, dtype: str) -> Any:
    """Return a basis without a window, with settings drawn at random."""
    inner = [None, rng.uniform(0.5, 2, CHANNELS), np.eye(CHANNELS) + 0.1][rng.integers(3)]
    return streambasis.StreamBasis(
        [CHANNELS, [f"ch {i}" for i in range(CHANNELS)]][rng.integers(2)],
        rtol=[None, 1e-3][rng.integers(2)],
        capacity=[None, 3][rng.integers(2)],
        dtype=dtype,
        inner=inner,
    )


def windowed_basis(rng: np.random.Generator, dtype: str) -> Any:
    """Return a basis with a window, with settings drawn at random."""
    return streambasis.StreamBasis(
        CHANNELS,
        window=[1, 7, 20][rng.integers(3)],
        span=[None, 9.0][rng.integers(2)],
        rtol=[None, 1e-3][rng.integers(2)],
        capacity=[None, 3][rng.integers(2)],
        dtype=dtype,
        inner=[None, rng.uniform(0.5, 2, CHANNELS)][rng.integers(2)],
    )


def principal_basis(rng: np.random.Generator, dtype: str) -> Any:
    """Return a principal basis with settings drawn at random."""
    return streambasis.PrincipalBasis(
        CHANNELS,
        rank=["noise", "mdl", 2][rng.integers(3)],
        forget=[1.0, 0.99][rng.integers(2)],
        block=[None, 7][rng.integers(2)],
        centre=bool(rng.integers(2)),
        dtype=dtype,
    )


def novelty_monitor(rng: np.random.Generator, dtype: str) -> Any:
    """Return a monitor with a short baseline and settings drawn at random."""
    assert dtype
    return streambasis.NoveltyMonitor(
        [CHANNELS, [f"ch {i}" for i in range(CHANNELS)]][rng.integers(2)],
        baseline=60,
        false_alarm=1e-2,
        half_life=[None, 200.0][rng.integers(2)],
    )


def faulty(rng: np.random.Generator, count: int, dtype: str) -> Samples:
    """Return two sources and noise with faults that come back, and with missing values."""
    samples = noisy(rng, count, "float64")
    fault = rng.normal(size=CHANNELS)
    for start in range(150, count, 60):
        samples[start : start + 20] += 10 * fault
    samples[rng.random(samples.shape) < 0.002] = np.nan
    assert dtype
    return samples


DTYPES = ("float32", "float64", "complex64", "complex128")


class Case(NamedTuple):
    """An object to save: how it is made and fed, and how long a feed it takes to get going."""

    make: Callable[..., Any]
    draw: Callable[..., Samples]
    dtypes: tuple[str, ...] = DTYPES
    length: int = 1


OBJECTS = {
    "StreamBasis": Case(stream_basis, deterministic),
    "Window": Case(windowed_basis, deterministic),
    "PrincipalBasis": Case(principal_basis, noisy),
    "NoveltyMonitor": Case(novelty_monitor, faulty, ("float64",), 40),
}
EVERY_DTYPE = [(name, dtype) for name, case in OBJECTS.items() for dtype in case.dtypes]


def is_windowed(obj: Any) -> bool:
    """Return whether samples leave the object again, so that it wants their times."""
    return isinstance(obj, streambasis.StreamBasis) and (obj.window or obj.span) is not None


def push_all(obj: Any, samples: Samples) -> Any:
    """Push a batch, one sample a second where times are wanted."""
    if not is_windowed(obj):
        return obj.push_many(samples)
    return obj.push_many(samples, at=np.arange(obj.count, obj.count + len(samples)))


def fed(obj: Any, samples: Samples, sizes: list[int]) -> list[str]:
    """Push samples one by one and in batches; return all that was answered, bit for bit."""
    answers = []
    at = 0
    for size in sizes:
        if size == 0:
            answer = obj.push(samples[at], **({"at": obj.count} if is_windowed(obj) else {}))
            at += 1
            answers.append("|".join(repr(value) for value in answer))
        else:
            table = push_all(obj, samples[at : at + size])
            at += size
            if isinstance(table, pa.Table):
                answers += [f"{name} {table[name].to_pylist()}" for name in table.column_names]
            else:
                for name in table.__slots__:
                    answers.append(f"{name} {np.asarray(getattr(table, name)).tobytes().hex()}")
        if is_windowed(obj) and obj.count % 3 == 0 and len(obj.members):
            answers.append(f"retracted {obj.retract(obj.members[obj.count % len(obj.members)])}")
        if isinstance(obj, streambasis.NoveltyMonitor):
            for event in obj.events:
                if not event.open and event["label"] is None and len(event["channels"]) % 2:
                    obj.label(event, f"seen {event['event']}")
            answers.append(repr([dict(event) for event in obj.events]))
    return answers


@pytest.mark.parametrize("name", OBJECTS)
@given(data=st.data())
def test_restart_is_invisible(name: str, data: st.DataObject) -> None:
    """At any point of any schedule, save + load + go on gives the same decisions and vectors.

    Every later snapshot is the same to the last byte as well.
    """
    make, draw, dtypes, length = OBJECTS[name]
    seed = data.draw(st.integers(0, 2**32 - 1), "seed")
    dtype = data.draw(st.sampled_from(dtypes), "dtype")
    # 0 is one sample by push, more is a batch by push_many
    sizes = data.draw(st.lists(st.integers(0, 12), min_size=1, max_size=12), "sizes")
    sizes = [size * length for size in sizes]
    stops = data.draw(st.lists(st.integers(0, len(sizes)), max_size=3), "stops")
    samples = draw(np.random.default_rng(seed), sum(max(size, 1) for size in sizes), dtype)
    straight = make(np.random.default_rng(seed), dtype)
    expected = fed(straight, samples, sizes)

    obj = make(np.random.default_rng(seed), dtype)
    actual: list[str] = []
    at = done = 0
    with tempfile.TemporaryDirectory() as folder:
        path = os.path.join(folder, "state.arrow")
        for stop in [*sorted(stops), len(sizes)]:
            actual += fed(obj, samples[at:], sizes[done:stop])
            at += sum(max(size, 1) for size in sizes[done:stop])
            done = stop
            save(obj, path)
            obj = load(path)
    assert actual == expected
    if name != "NoveltyMonitor":
        assert obj.vectors.tobytes() == straight.vectors.tobytes()
    assert to_bytes(obj) == to_bytes(straight)


@pytest.mark.parametrize("name", OBJECTS)
def test_an_object_may_be_pushed_to_after_it_was_saved(name: str) -> None:
    """A state shares nothing with its object, nor with a second object made from it."""
    make, draw, _, length = OBJECTS[name]
    samples = draw(np.random.default_rng(2), 60 * length, "float64")
    obj = make(np.random.default_rng(1), "float64")
    push_all(obj, samples[: 30 * length])
    state = obj.to_state()
    before = to_bytes(state)
    one, two = (type(obj).from_state(state) for _ in range(2))
    for each in (obj, one):
        push_all(each, samples[30 * length :])
    assert to_bytes(state) == before
    assert to_bytes(two) == before
    assert to_bytes(one) == to_bytes(obj)


@pytest.mark.parametrize(("name", "dtype"), EVERY_DTYPE)
def test_a_state_that_does_not_fit_together_is_refused(name: str, dtype: str) -> None:
    """An array or fact that is missing, longer or of another type is refused, not crashed on."""
    make, draw, _, length = OBJECTS[name]
    obj = make(np.random.default_rng(4), dtype)
    push_all(obj, draw(np.random.default_rng(5), 40 * length, dtype))
    good = to_bytes(obj)
    spoiled = 0
    for spoil in (drop, lengthen, shorten, retype):
        for number in range(100):
            state = state_from_bytes(good)
            if not spoil(state, number):
                break
            with pytest.raises(SnapshotError):
                from_bytes(to_bytes(state), verify=False)
            spoiled += 1
    assert spoiled > 10


@pytest.mark.parametrize("name", ["sums", "singular"])
def test_squares_and_spreads_below_zero_are_refused(name: str) -> None:
    """Weights, sums of squares and spreads along directions are never negative in a real run."""
    basis = streambasis.PrincipalBasis(4)
    basis.push_many(np.random.default_rng(6).normal(size=(50, 4)))
    for position in range(4):
        state = basis.to_state()
        (held,) = (part for part, array in arrays_of(state) if array == name)
        held.arrays[name] = held.arrays[name].copy()
        held.arrays[name][position] *= -1
        if held.arrays[name][position] < 0:
            with pytest.raises(SnapshotError, match="negative"):
                from_bytes(to_bytes(state))


def arrays_of(state: State) -> list[tuple[State, str]]:
    """Return every array with its state, parts included."""
    found = [(state, name) for name in state.arrays]
    for part in state.parts.values():
        found += arrays_of(part)
    return found


def drop(state: State, number: int) -> bool:
    """Leave out the n-th array."""
    found = arrays_of(state)
    if number >= len(found):
        return False
    owner, name = found[number]
    del owner.arrays[name]
    return True


def resize(state: State, number: int, change: int) -> bool:
    """Give the n-th array that has rows more or fewer of them."""
    found = [
        (owner, name)
        for owner, name in arrays_of(state)
        if owner.arrays[name].size and (owner.kind, name) not in ANY_LENGTH
    ]
    if number >= len(found):
        return False
    owner, name = found[number]
    array = owner.arrays[name]
    owner.arrays[name] = np.resize(array, (len(array) + change, *array.shape[1:]))
    return True


def lengthen(state: State, number: int) -> bool:
    """Give the n-th array one row more."""
    return resize(state, number, 1)


def shorten(state: State, number: int) -> bool:
    """Take one row from the n-th array."""
    return resize(state, number, -1)


def retype(state: State, number: int) -> bool:
    """Make truth values of the n-th array of numbers; an inner product alone may hold them."""
    found = [
        (owner, name)
        for owner, name in arrays_of(state)
        if name != "inner" and owner.arrays[name].dtype != np.bool_
    ]
    if number >= len(found):
        return False
    owner, name = found[number]
    owner.arrays[name] = owner.arrays[name] != 0
    return True


@pytest.mark.parametrize("kind", ["int8", "float16", "longdouble", "bool"])
def test_weights_of_any_kind_of_number_are_saved(kind: str) -> None:
    """An inner product given in a type that snapshots do not hold survives as doubles."""
    basis = streambasis.StreamBasis(3, inner=np.array([1, 1, 1], kind))
    basis.push([1.0, 2.0, 3.0])
    assert np.array_equal(from_bytes(to_bytes(basis)).vectors, basis.vectors)


def test_an_inner_product_that_was_lost_is_missed() -> None:
    """A basis in an inner product is never taken for a Euclidean one."""
    state = streambasis.StreamBasis(3, inner=[1.0, 2.0, 3.0]).to_state()
    for change in ({}, {"inner": np.eye(3)}):
        with pytest.raises(SnapshotError, match="inner product"):
            from_bytes(to_bytes(State(state.kind, state.facts, change, state.parts)))


@pytest.mark.parametrize("name", ["StreamBasis", "PrincipalBasis"])
def test_a_large_object_is_written_where_it_lies(
    name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Lent instead of copied, the same bytes are written, and a failure ends the loan as well."""
    make, draw, _, _ = OBJECTS[name]
    obj = make(np.random.default_rng(3), "float64")
    obj.push_many(draw(np.random.default_rng(4), 40, "float64"))
    copied = to_bytes(obj)
    monkeypatch.setattr(streambasis.snapshot, "LENT", 0)
    with obj.lent_state() as state:
        vectors = state.parts["core"].arrays["vectors"]
        assert np.shares_memory(vectors, obj._core.directions)
    assert to_bytes(obj) == copied
    with pytest.raises(OSError, match="no/such"):
        save(obj, "/no/such/folder/state.arrow")
    vectors = obj.to_state().parts["core"].arrays["vectors"]
    assert not np.shares_memory(vectors, obj._core.directions)
    obj.push_many(draw(np.random.default_rng(5), 40, "float64"))
    assert to_bytes(obj) != copied


def test_broken_links_between_the_samples_of_a_window_are_refused() -> None:
    """A window whose samples do not follow one another would never be walked to its end."""
    obj = streambasis.StreamBasis(CHANNELS, window=8)
    obj.push_many(deterministic(np.random.default_rng(1), 20, "float64"))
    obj.retract(obj.members[3])
    good = to_bytes(obj)
    assert from_bytes(good).count == 20
    slots, links = state_from_bytes(good).parts["core"].arrays["members"].shape
    for slot in range(slots):
        for link in (exchange.OLDER, exchange.NEWER):
            state = state_from_bytes(good)
            members = state.parts["core"].arrays["members"].copy()
            if members[slot, exchange.ID] == exchange.NONE and link == exchange.OLDER:
                continue  # a free slot is linked one way only
            members[slot, link] = (members[slot, link] + 1) % slots
            state.parts["core"].arrays["members"] = members
            with pytest.raises(SnapshotError, match="do not fit each other"):
                from_bytes(to_bytes(state))
    assert links == exchange.MEMBER


def test_the_samples_of_a_window_are_plain_columns() -> None:
    """Numbers and times of the samples in the window, oldest first, and of the pivots."""
    obj = streambasis.StreamBasis(CHANNELS, window=8)
    obj.push_many(deterministic(np.random.default_rng(1), 20, "float64"), at=np.arange(20) / 4)
    obj.retract(obj.members[3])
    frame = pl.read_ipc(io.BytesIO(to_bytes(obj)))
    assert frame["samples"][0].to_list() == obj.members.tolist()
    assert frame["times"][0].to_list() == [number * 250_000_000 for number in obj.members]
    assert frame["pivots"][0].to_list() == obj.pivots.tolist()
    assert np.array_equal(frame["vectors"].to_numpy()[0], obj.vectors)


@pytest.mark.parametrize("window", [None, 8])
@pytest.mark.parametrize(("entry", "value"), [(CAPACITY, 2), (CAPACITY, CHANNELS + 1), (COUNT, 2)])
def test_counters_that_contradict_the_directions_are_refused(
    window: int | None, entry: int, value: int
) -> None:
    """A capacity below the rank or beyond the channels, or fewer samples than it holds."""
    basis = streambasis.StreamBasis(CHANNELS, window=window)
    basis.push_many(np.eye(CHANNELS)[:3])
    state = basis.to_state()
    state.parts["core"].arrays["header"][entry] = value
    with pytest.raises(SnapshotError, match=r"3 (directions|samples)"):
        from_bytes(to_bytes(state))
