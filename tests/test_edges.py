"""The comparisons that every decision turns on, at their very edges: equal, and one bit beyond.

The values are such that all arithmetic on the way to the comparison is exact. DEVELOPERS.md lists
which test catches which comparison when it is turned around or loses its equality.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from streambasis import NoveltyMonitor, StreamBasis
from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.kernels.projection import ROUNDING_FLOOR
from streambasis.ranks import Spectrum, optimal_threshold, rank_by_noise

pytestmark = pytest.mark.kernels

EPSILON = 2.0**-52
ABOVE_HALF = np.nextafter(0.5, 1.0)


def pushed(basis: StreamBasis, samples: list[list[float]], ways: str) -> list[str]:
    """Push samples singly, or all but the first in a batch, and return the reasons."""
    if ways == "singles":
        return [basis.push(sample).reason for sample in samples]
    # an empty basis has nothing to project a block on
    return [basis.push(samples[0]).reason, *basis.push_many(samples[1:]).reason.tolist()]


@pytest.mark.parametrize("ways", ["singles", "batch"])
@pytest.mark.parametrize("window", [None, 8])
def test_a_residual_equal_to_the_tolerance_is_a_rejection(window: int | None, ways: str) -> None:
    """|residual| > tolerance grows the basis; |residual| = tolerance does not."""
    basis = StreamBasis(2, atol=0.5, window=window)
    samples = [[1.0, 0.0], [1.0, 0.5], [1.0, -0.5], [1.0, ABOVE_HALF]]
    expected = ["independent", "dependent", "dependent", "independent"]
    assert pushed(basis, samples, ways) == expected


@pytest.mark.parametrize("window", [None, 200])
def test_no_tolerance_is_below_the_rounding_floor_nor_lowered_to_it(window: int | None) -> None:
    """The relative tolerance is the larger of rtol and max(8, sqrt(rank)) epsilons."""
    exact, loose = (StreamBasis(128, rtol=rtol, window=window) for rtol in (0.0, 1e-3))
    unit = np.eye(128)
    for rank in (1, 63, 64, 65, 100):
        for basis in (exact, loose):
            while basis.rank < rank:
                basis.push(unit[basis.rank])
        assert exact.push(unit[0]).tolerance == max(ROUNDING_FLOOR, math.sqrt(rank)) * EPSILON
        assert loose.push(unit[0]).tolerance == 1e-3


@pytest.mark.parametrize("ways", ["singles", "batch"])
@pytest.mark.parametrize("window", [None, 8])
def test_the_capacity_is_filled_and_not_exceeded(window: int | None, ways: str) -> None:
    """The sample that would be one direction too many is the first to be rejected as such."""
    basis = StreamBasis(4, capacity=2, window=window)
    expected = ["independent", "independent", "full", "full"]
    assert pushed(basis, np.eye(4).tolist(), ways) == expected
    assert (basis.rank, basis.audit().uncovered) == (2, 2)


@pytest.mark.parametrize("ways", ["singles", "batch"])
def test_a_window_by_count_holds_just_so_many(ways: str) -> None:
    """The sample that fills the window sends none away, the next one sends one."""
    basis = StreamBasis(2, window=3)
    samples = [[1.0, 0.0]] * 4
    if ways == "batch":
        expired = basis.push_many(samples).expired.tolist()
    else:
        expired = [basis.push(sample).expired for sample in samples]
    assert expired == [0, 0, 0, 1]
    assert basis.members.tolist() == [1, 2, 3]


@pytest.mark.parametrize("ways", ["singles", "batch"])
def test_a_window_by_span_is_open_at_its_old_end(ways: str) -> None:
    """A sample stays one nanosecond short of the span, and leaves when it is as old as that."""
    nanosecond = np.timedelta64(1, "ns")
    start, span = np.datetime64("2026-01-01", "ns"), np.timedelta64(10, "s")
    times = np.array([start, start + span - nanosecond, start + span])
    basis = StreamBasis(2, span=span)
    samples = [[1.0, 0.0]] * 3
    if ways == "batch":
        expired = basis.push_many(samples, at=times).expired.tolist()
    else:
        expired = [basis.push(s, at=t).expired for s, t in zip(samples, times, strict=True)]
    assert expired == [0, 0, 1]
    assert basis.expire(before=start + span) == 1
    assert basis.expire(before=start + span) == 0
    assert basis.members.tolist() == [2]


@pytest.mark.parametrize(("size", "kept"), [(0.5, False), (ABOVE_HALF, True)])
def test_a_sample_that_needs_a_direction_by_its_tolerance_does_not_need_it(
    size: float, kept: bool
) -> None:
    """When a pivot leaves, a sample takes over if without it it lay beyond its tolerance."""
    basis = StreamBasis(2, atol=0.5, window=3)
    for sample in ([1.0, 0.0], [0.0, 1.0], [size, 0.0]):
        basis.push(sample)
    decision = basis.push([0.0, 1.0])
    assert (decision.expired, decision.dropped) == (1, not kept)
    assert basis.rank == 1 + kept
    assert (2 in basis.pivots) == kept
    assert basis.audit().coverage <= 1.0


def test_the_newest_sample_with_a_good_share_takes_over() -> None:
    """A tenth of its norm along the direction is enough; with less, the largest share counts."""
    for share, taken in ((0.125, 3), (0.0625, 2)):
        basis = StreamBasis(2, window=4)
        for sample in ([1.0, 0.0], [0.0, 1.0], [1.0, 0.0], [share, 1.0], [0.0, 1.0]):
            decision = basis.push(sample)
        assert (decision.expired, decision.dropped) == (1, 0)
        assert taken in basis.pivots, share
    # nobody has a tenth: the newest within a tenth of the largest share
    basis = StreamBasis(2, window=5)
    for sample in ([1.0, 0.0], [0.0, 1.0], [0.0625, 1.0], [0.03, 1.0], [0.001, 1.0], [0.0, 1.0]):
        basis.push(sample)
    assert 3 in basis.pivots


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
@pytest.mark.parametrize("kept", [4, 6, 7])
def test_a_slide_that_drops_one_direction_and_adds_one_keeps_the_span(
    dtype: str, kept: int
) -> None:
    """In a window of independent samples every slide replaces; the span is that of the window."""
    rng = np.random.default_rng(kept)
    samples = rng.standard_normal((4 * kept, 9)).astype(dtype)
    if dtype == "complex128":
        samples += 1j * rng.standard_normal(samples.shape)
    basis = StreamBasis(9, window=kept, dtype=dtype)
    for end, sample in enumerate(samples, 1):
        decision = basis.push(sample)
        assert (decision.grew, decision.dropped) == (True, end > kept)
        held = samples[max(0, end - kept) : end]
        assert np.abs(basis.residual(held)).max() < 100 * EPSILON
    assert basis.retract(int(basis.members[0])) == 1
    assert np.abs(basis.residual(held[1:])).max() < 100 * EPSILON
    assert np.linalg.norm(basis.residual(held[0])) > 0.1
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT


@pytest.mark.parametrize("way", ["criterion", "never", "always"])
def test_a_renewal_keeps_span_order_and_samples(way: str) -> None:
    """After renew() the pivot samples are still L times the directions, now orthonormal again."""
    samples = np.vander(np.linspace(0.0, 1.0, 12), 7, increasing=True).T
    basis = StreamBasis(12, rtol=1e-12, reorthogonalize=way)
    decisions = [basis.push(sample) for sample in samples]
    assert [d.passes for d in decisions][-1] == {"criterion": 2, "never": 1, "always": 2}[way]
    basis.renew()
    assert basis.audit().renewals == 1
    assert basis.audit().orthogonality < ORTHOGONALITY_LIMIT
    assert np.abs(basis.triangular @ basis.vectors - samples).max() < 100 * EPSILON
    np.testing.assert_array_equal(basis.pivots, np.arange(7))


@pytest.fixture(scope="module")
def trained() -> NoveltyMonitor:
    """Return a monitor that has learnt its baseline, on which an event opens at 3 of 5."""
    rng = np.random.default_rng(2)
    monitor = NoveltyMonitor(6, baseline=400, persistence=(3, 5), quiet=6)
    mixing = rng.normal(size=(2, 6))
    monitor.push_many(rng.normal(size=(420, 2)) @ mixing + rng.normal(size=(420, 6)))
    return monitor


def copy_of(monitor: NoveltyMonitor) -> NoveltyMonitor:
    """Return a monitor in the same state."""
    return NoveltyMonitor.from_state(monitor.to_state())


def test_a_sample_at_its_limit_is_not_novel(trained: NoveltyMonitor) -> None:
    """SPE > limit is novel and counts to an event; SPE = limit is neither."""
    sample = np.full(6, 4.0)
    spe = copy_of(trained).push(sample).spe
    for limit, novel in ((spe, False), (np.nextafter(spe, 0.0), True)):
        monitor = copy_of(trained)
        monitor._judge.model.limit.value = limit
        verdicts = [monitor.push(sample) for _ in range(5)]
        assert [v.spe for v in verdicts] == [spe] * 5
        assert [v.novel for v in verdicts] == [novel] * 5
        assert [v.event for v in verdicts] == ([None, None, 0, 0, 0] if novel else [None] * 5)


@pytest.mark.parametrize(
    ("beyond", "opened"),
    [("11000", False), ("10101", True), ("10011", True), ("100011", False), ("110001", False)],
)
def test_an_event_opens_at_just_so_many_of_so_many(
    trained: NoveltyMonitor, beyond: str, opened: bool
) -> None:
    """With persistence (3, 5) the third sample beyond within five opens one, in six does not."""
    monitor = copy_of(trained)
    ordinary = monitor._judge.model.scaling.centre
    for kind in beyond:
        monitor.push(ordinary + 100.0 * (kind == "1") * np.eye(6)[0])
    assert bool(monitor.events) == opened


def test_an_energy_at_the_threshold_is_noise() -> None:
    """The rank counts energies above the threshold of Gavish & Donoho (2014), not those at it."""
    n, samples, outside = 16, 64.0, 15.0
    factor = optimal_threshold(n / samples) ** 2
    empty = Spectrum(np.zeros(1), outside, n, samples, False)
    threshold = factor * empty.noise(1)
    for energy, rank in ((threshold, 0), (np.nextafter(threshold, np.inf), 1)):
        spectrum = Spectrum(np.array([energy]), outside, n, samples, False)
        assert rank_by_noise(spectrum, 8) == rank
