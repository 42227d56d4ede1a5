"""Novelty in a set of sensors: events, a label that recurs, and a change that is adopted.

    python examples/novelty.py --samples 12000 --out NOVELTY.png

An invented compressor train with 16 sensors runs on two hidden sources (load and ambient). Planted
are a fault of the lube oil, seen three times; a sticking valve; and, for the last third, another
way of running. A NoveltyMonitor learns the beginning. When the first event closes, an engineer
looks at the channels that carry it and labels it: later events with the same direction bring the
label along. When the event of the new way of running has stood for a while it is adopted: it is
explained from then on, and a fault on top of it is an event of its own.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from streambasis import NoveltyMonitor

CHANNELS = (
    "load_kw", "speed_rpm", "suction_bar", "discharge_bar", "flow_m3h", "inlet_c", "outlet_c",
    "oil_bar", "oil_c", "bearing_1_c", "bearing_2_c", "vibration_1", "vibration_2", "valve_pct",
    "cooling_c", "ambient_c",
)  # fmt: skip
LEAST_SAMPLES = 4000
BLOCK = 100
LASTS = 400
"""An event that is still open after so many samples is taken for another way of running."""

OIL = {"oil_bar": -6.0, "oil_c": 4.0, "bearing_1_c": 3.0}
VALVE = {"valve_pct": 7.0, "flow_m3h": -4.0}
REGIME = {"speed_rpm": 5.0, "vibration_1": 4.0, "vibration_2": 4.0, "outlet_c": -3.0}
PLANTED = (
    ("lube oil", OIL, 0.30, 0.33),
    ("valve sticks", VALVE, 0.42, 0.45),
    ("lube oil", OIL, 0.52, 0.55),
    ("another way of running", REGIME, 0.64, 1.00),
    ("lube oil", OIL, 0.85, 0.88),
)
"""What happens: how far each channel moves, in its noise, and from when to when."""


def feed(count: int, seed: int) -> np.ndarray:
    """Return the invented feed, (count, 16)."""
    rng = np.random.default_rng(seed)
    mixing = rng.normal(size=(2, len(CHANNELS)))
    sources = np.cumsum(rng.normal(size=(count, 2)), axis=0)
    sources = np.sin(sources / 12.0) * 4.0  # slow, and never out of range
    values = sources @ mixing + rng.normal(size=(count, len(CHANNELS)))
    for _, moved, start, end in PLANTED:
        rows = slice(int(start * count), int(end * count))
        for name, size in moved.items():
            values[rows, CHANNELS.index(name)] += size
    return values * np.geomspace(0.01, 100.0, len(CHANNELS)) + 50.0  # units of all sizes


def told(event: dict) -> str:
    """Return a line about a closed event."""
    shares = ", ".join(f"{name} {event['contributions'][name]:.0%}" for name in event["channels"])
    text = f"event {event['event']}  samples {event['start']} to {event['end']}  {shares}"
    if event["repeats"] is not None:
        text += f"  repeats event {event['repeats']}, cosine {event['cosine']:.2f}"
    return text + (f': "{event["label"]}"' if event["label"] else "")


def draw(path: Path, table: pa.Table, events: list[dict], adopted: list[int]) -> None:
    """Draw the squared prediction error over its limit, events shaded by what they repeat."""
    first: dict[int, int] = {}
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 4.5), layout="constrained")
    axes = figure.subplots()
    over = pc.divide(table["spe"], table["limit"]).to_numpy(zero_copy_only=False)
    axes.semilogy(table["sample"], over, linewidth=0.5, color="0.4")
    axes.axhline(1.0, color="black", linewidth=0.8, linestyle="--")
    for event in events:
        number = event["event"]
        first[number] = first.get(event["repeats"], number)
        axes.axvspan(event["start"], event["end"], color=f"C{first[number]}", alpha=0.35)
        text = event["label"] or f"event {number}"
        text += ", adopted" if number in adopted else ""
        top = axes.get_xaxis_transform()
        axes.text(event["start"], 1.02, text, transform=top, rotation=30, fontsize=8)
    axes.set(xlabel="sample", ylabel="squared prediction error / limit")
    axes.spines[["top", "right"]].set_visible(False)
    figure.savefig(path, dpi=110)


def main(arguments: list[str] | None = None) -> int:
    """Watch the invented feed and act on what is found, as an engineer would."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--samples", type=int, default=12_000, help=f"at least {LEAST_SAMPLES}")
    parser.add_argument("--seed", type=int, default=4, help="of the random numbers")
    parser.add_argument("--out", type=Path, help="picture of the run (.png, .svg, .pdf)")
    options = parser.parse_args(arguments)
    if options.samples < LEAST_SAMPLES:
        parser.error(f"--samples {options.samples}: at least {LEAST_SAMPLES}")

    values = feed(options.samples, options.seed)
    monitor = NoveltyMonitor(CHANNELS, baseline=options.samples // 4)
    tables: list[pa.Table] = []
    known: set[int] = set()
    for start in range(0, len(values), BLOCK):
        tables.append(monitor.push_many(values[start : start + BLOCK]))
        for event in monitor.events:
            number = event["event"]
            if event.open and monitor.count - event["start"] > LASTS:
                monitor.adopt(number)
                known.add(number)
                print(f"event {number}  since sample {event['start']}: it lasts, and is adopted")
            elif not event.open and number not in known:
                known.add(number)
                print(told(event))
                if number == 0:
                    monitor.label(0, "lube oil")
                    print('         an engineer looks into it and labels it "lube oil"')
    monitor.finish()
    adopted = sorted(set(monitor.adopted))

    table = pa.concat_tables(tables)
    novel = table["novel"].to_numpy()
    for event in monitor.events:
        novel[event["start"] : event["end"] + 1] = False
    judged = len(values) - monitor.baseline
    loadings = np.abs(monitor.loadings(values[-BLOCK:]))
    print(f"\n{judged} samples judged; outside events {novel.sum()} were beyond the limit")
    print(f"rank {monitor.rank}, noise floor {monitor.noise:.2f} (1: as the baseline had it)")
    print(
        f"the last samples hold {loadings.mean():.1f} ± {loadings.std():.1f} noise units of the "
        "adopted way of running"
    )
    if options.out:
        draw(options.out, table, monitor.events, adopted)
    return 0


if __name__ == "__main__":
    sys.exit(main())
