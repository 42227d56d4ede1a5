"""What the novelty monitor makes of events: their channels, their return, and hard cases."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bench.harness import Table
from bench.plants import Plant, sources_of, trained, visible, with_fault
from streambasis import NoveltyMonitor


def attribution(quick: bool) -> Table:
    """Count the events whose top channels are those of the fault."""
    table = Table(
        "Attribution: events whose top channels are the faulty ones, of 30 channels, 3 times the "
        "limit",
        ["faulty channels", "events", "event contributions", "single samples",
         "single, squared residuals", "named exactly"],
    )  # fmt: skip
    rounds = 20 if quick else 60
    plant = Plant(3, 30, 4)
    monitor, outside = trained(plant)
    start = monitor.to_state()
    limit = float(monitor.push_many(plant.run(1))["limit"][0].as_py())
    for count in (1, 2, 3):
        hits = np.zeros(4)
        for _ in range(rounds):
            monitor = NoveltyMonitor.from_state(start)
            channels = plant.rng.choice(plant.n, count, replace=False)
            shape = np.zeros(plant.n)
            shape[channels] = plant.rng.choice([-1.0, 1.0], count)
            fault = visible(plant, monitor, outside, shape, 3.0, limit)
            feed = with_fault(plant, plant.run(400), fault, 100, 160)
            monitor.push_many(feed)
            event = monitor.events[0]
            true = {str(c) for c in channels}
            top = list(event["contributions"])[:count]
            single = list(monitor.contributions(feed[130]))[:count]
            plain = np.abs(monitor.basis.residual(feed[130]) / monitor.scale)
            hits += [
                set(top) == true,
                set(single) == true,
                {str(c) for c in np.argsort(-plain)[:count]} == true,
                set(event["channels"]) == true,
            ]
        table.add(count, rounds, *(round(float(h), 3) for h in hits / rounds))
    table.notes.append("wanted: 0.95 for event contributions")
    return table


def recurrence(quick: bool) -> Table:
    """Count the faults recognised when they come back, and the different ones taken for them."""
    table = Table(
        "Recurrence: the same fault at other strengths, and different faults, directions at least "
        "60 degrees apart",
        ["channels", "strength (of the limit)", "pairs", "recognised", "confused"],
    )
    rounds = 20 if quick else 60
    for n in (16, 64):
        plant = Plant(4, n, 4)
        monitor, outside = trained(plant)
        start = monitor.to_state()
        limit = float(monitor.push_many(plant.run(1))["limit"][0].as_py())
        for times in (1.5, 3.0, 10.0):
            same = other = 0
            for _ in range(rounds):
                monitor = NoveltyMonitor.from_state(start)
                shapes = [plant.rng.standard_normal(n)]
                while len(shapes) < 2:
                    shape = plant.rng.standard_normal(n)
                    a, b = (outside @ (s * plant.sizes / monitor.scale) for s in (*shapes, shape))
                    if abs(a @ b) <= 0.5 * np.linalg.norm(a) * np.linalg.norm(b):
                        shapes.append(shape)
                first, second = shapes
                for shape, strength in ((first, 3.0), (first, times), (second, times)):
                    fault = visible(plant, monitor, outside, shape, strength, limit)
                    monitor.push_many(with_fault(plant, plant.run(400), fault, 100, 160))
                found = [e["repeats"] for e in monitor.events]
                same += found[1] == 0
                other += any(f is not None for f in found[2:])
            table.add(n, times, rounds, round(same / rounds, 3), round(other / rounds, 3))
    table.notes.append("wanted: 0.95 recognised, 0.02 confused")
    return table


def hard_cases(quick: bool) -> Table:
    """Show what becomes of feeds that do not keep to the model of a fault on an ordinary feed."""
    table = Table(
        "Hard cases: half-life 5,000",
        ["channels", "what happens", "events", "limit after : before", "farthest level moved"],
    )
    cases = [(n, growth) for n in (16, 64) for growth in (1.6, 4.0)]
    for n, growth in cases[: 2 if quick else None]:
        plant = Plant(6, n, sources_of(n))
        feed = plant.run(6000)
        more = np.sqrt(growth**2 - 1.0) * plant.rng.standard_normal((2000, n))
        feed[2000:4000] += more * plant.sizes
        text = f"noise of all channels {growth} times as large for 2,000 samples: one event wanted"
        _add_case(table, text, plant, [feed])
    for n in (32,) if quick else (32, 300):
        plant = Plant(7, n, sources_of(n))
        feeds = [plant.run(3000) for _ in range(5)]
        for feed in feeds:
            for start in range(200, 3000, 300):
                channels = plant.rng.choice(n, 3, replace=False)
                size = plant.rng.uniform(3.0, 12.0)
                stop = start + int(plant.rng.integers(20, 100))
                feed[start:stop, channels] += size * plant.sizes[channels]
        text = "50 short faults, many too weak for a sample to exceed the limit: limit kept"
        _add_case(table, text, plant, feeds)
    for samples in (3000, 30_000):
        plant = Plant(8, 32, sources_of(32))
        feed = plant.run(samples)
        feed[:, 3] += np.linspace(0.0, 12.0, samples) * plant.sizes[3]
        text = f"one channel creeps by 12 noise deviations over {samples:,} samples"
        _add_case(table, text, plant, [feed])
    return table


def _add_case(table: Table, text: str, plant: Plant, feeds: list[NDArray[np.float64]]) -> None:
    """Run feeds after a baseline and add what came out."""
    monitor = NoveltyMonitor(plant.n, baseline=4000, half_life=5000.0)
    monitor.push_many(plant.run(4000))
    before = monitor.push(plant.run(1)[0]).limit
    for feed in feeds:
        after = monitor.push_many(feed)["limit"][-1].as_py()
    monitor.finish()
    channel, far = next(iter(monitor.moved.items()))
    moved = f"{channel}: {far:.1f}"
    table.add(plant.n, text, len(monitor.events), round(after / before, 3), moved)
