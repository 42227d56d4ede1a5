"""Make the example feed: an invented pumping station with faults planted at known places.

    python examples/make_feed.py --seed N --samples N --out FEED.csv --truth TRUTH.json

Two pumps, A and B, lift water into one main. Five hidden sources (demand, suction level, ambient
temperature, supply voltage, entrained air) move 24 channels in different units; every channel adds
noise of its own. Planted on top: a slow drift of how strongly two channels follow the demand,
three faults of different kinds of which one returns, and one change of operating regime. Station,
channels and figures are made up.

The ending of FEED chooses the format (.csv, .parquet, .arrow); the values are the same in each.
The same seed, length and library versions give the same bytes.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

LEAST_SAMPLES = 12_000
"""Below this the first fault would fall into a baseline of 2,000 samples, or the regime would be
too short to be told from a fault."""

START = np.datetime64("2026-03-02T00:00:00", "s")
STEP_SECONDS = 10

MEMORY = (25.0, 18.0, 30.0, 6.0, 4.0)
"""Correlation time of each source in samples: demand, suction level, ambient, supply, air."""

# name with unit, mean, standard deviation of the channel's own noise, decimals, then how far one
# standard deviation of each source moves the channel, in units of that noise
CHANNELS: tuple[tuple[str, float, float, int, tuple[float, ...]], ...] = (
    ("flow_a_m3h", 412.0, 1.8, 1, (3.2, 0.9, 0.0, 0.5, -0.8)),
    ("flow_b_m3h", 398.0, 2.6, 1, (2.6, 0.8, 0.0, 0.4, -0.6)),
    ("suction_a_bar", 1.42, 0.004, 4, (-1.1, 3.0, 0.0, 0.0, -0.9)),
    ("suction_b_bar", 1.39, 0.006, 4, (-0.9, 2.4, 0.0, 0.0, -0.7)),
    ("discharge_a_bar", 6.85, 0.011, 3, (-1.9, 1.4, 0.0, 0.9, -0.8)),
    ("discharge_b_bar", 6.81, 0.017, 3, (-1.6, 1.1, 0.0, 0.8, -0.6)),
    ("main_bar", 6.52, 0.009, 4, (-2.3, 1.0, 0.0, 0.7, 0.0)),
    ("speed_a_rpm", 1478.0, 0.6, 2, (-1.0, 0.0, 0.0, 2.3, 0.0)),
    ("speed_b_rpm", 1475.0, 0.9, 2, (-0.8, 0.0, 0.0, 1.9, 0.0)),
    ("current_a_a", 187.0, 0.45, 2, (2.2, -0.6, 0.0, -2.0, -0.5)),
    ("current_b_a", 181.0, 0.7, 2, (1.8, -0.5, 0.0, -1.7, -0.4)),
    ("power_a_kw", 104.0, 0.35, 2, (2.4, -0.7, 0.0, 1.2, -0.6)),
    ("power_b_kw", 101.0, 0.5, 2, (2.0, -0.5, 0.0, 1.0, -0.5)),
    ("supply_v", 402.0, 0.4, 2, (-0.4, 0.0, 0.0, 3.1, 0.0)),
    ("bearing_a_c", 58.0, 0.12, 3, (0.9, 0.0, 2.1, 0.0, 0.6)),
    ("bearing_b_c", 61.0, 0.2, 3, (0.7, 0.0, 1.8, 0.0, 0.5)),
    ("winding_a_c", 83.0, 0.25, 2, (1.5, 0.0, 1.9, -0.8, 0.0)),
    ("winding_b_c", 86.0, 0.3, 2, (1.3, 0.0, 1.6, -0.6, 0.0)),
    ("water_c", 11.6, 0.03, 3, (0.0, -0.4, 2.2, 0.0, 0.0)),
    ("hall_c", 21.5, 0.08, 3, (0.2, 0.0, 2.7, 0.0, 0.0)),
    ("vibration_a_mms", 2.1, 0.05, 4, (0.6, -0.7, 0.0, 0.0, 2.4)),
    ("vibration_b_mms", 2.4, 0.07, 4, (0.5, -0.6, 0.0, 0.0, 2.0)),
    ("noise_db", 84.0, 0.3, 2, (0.7, 0.0, 0.0, 0.3, 1.9)),
    ("valve_pct", 63.0, 0.22, 3, (2.5, -0.4, 0.0, 0.0, 0.0)),
)
NAMES = [channel[0] for channel in CHANNELS]
LOADS = np.array([channel[4] for channel in CHANNELS])

# the other operating regime: a throttled main, in units of each channel's noise
REGIME = {
    "valve_pct": -9.0, "main_bar": 7.0, "discharge_b_bar": -6.0,
    "power_b_kw": 7.0, "vibration_a_mms": 5.0, "winding_b_c": -5.0,
}  # fmt: skip
DRIFT = {"bearing_b_c": 2.5, "noise_db": -2.0}
"""How much more (in noise per standard deviation) each follows the demand after 20,000 samples or
at the end, whichever is later: a shorter feed drifts as slowly, and so less far."""
DRIFT_SAMPLES = 20_000

KINDS = {"step": (2, 8.5), "ramp": (1, 16.0), "oscillation": (3, 10.0)}
"""Channels and strength (in noise) of each kind of fault."""

PERIOD = 14.0
"""Samples per turn of the oscillation."""


def correlated(rng: np.random.Generator, samples: int, memory: float) -> np.ndarray:
    """Return a Gaussian source of variance 1 whose correlation decays as exp(-lag / memory)."""
    keep = np.exp(-1.0 / memory)
    shocks = rng.standard_normal(samples)
    shocks[1:] *= np.sqrt(1.0 - keep * keep)
    value = 0.0
    out = np.empty(samples)
    for i, shock in enumerate(shocks.tolist()):
        value = keep * value + shock
        out[i] = value
    return out


def plan(rng: np.random.Generator, samples: int) -> list[dict[str, Any]]:
    """Return the four occurrences of the three faults, in order of time."""
    order = [str(kind) for kind in rng.permutation(list(KINDS))]
    quiet = [name for name in NAMES if name not in DRIFT and name not in REGIME]
    free = [str(name) for name in rng.permutation(quiet)]
    faults: list[dict[str, Any]] = []
    for kind, place in zip(order, (0.24, 0.38, 0.52), strict=True):
        count, strength = KINDS[kind]
        start = int(samples * (place + rng.uniform(-0.02, 0.02)))
        shape = {
            free.pop(): float(rng.choice([-1.0, 1.0]) * rng.uniform(0.85, 1.15) * strength)
            for _ in range(count)
        }
        end = start + int(rng.integers(280, 420))
        faults.append({"start": start, "end": end, "kind": kind, "repeats": None, "shape": shape})
    again = int(rng.integers(len(faults)))
    scale = float(rng.uniform(0.85, 1.2))
    start = int(samples * (0.87 + rng.uniform(-0.02, 0.02)))
    faults.append(
        {
            "start": start,
            "end": start + int(rng.integers(280, 420)),
            "kind": faults[again]["kind"],
            "repeats": again,
            "shape": {name: scale * size for name, size in faults[again]["shape"].items()},
        }
    )
    return faults


def course(kind: str, length: int) -> np.ndarray:
    """Return how a fault of a kind runs from its first sample to its last, at most 1 in size."""
    if kind == "ramp":
        return np.linspace(0.0, 1.0, length)
    if kind == "oscillation":
        return np.sin(2.0 * np.pi * np.arange(length) / PERIOD)
    return np.ones(length)


def make(seed: int, samples: int) -> tuple[np.ndarray, dict[str, Any]]:
    """Return the values, float64 (samples, 24), and the truth about what was planted."""
    rng = np.random.default_rng(seed)
    faults = plan(rng, samples)
    regime_start = int(samples * (0.66 + rng.uniform(-0.02, 0.02)))
    drift_start = int(samples * 0.15)

    sources = [correlated(rng, samples, memory) for memory in MEMORY]
    in_noise = rng.standard_normal((samples, len(CHANNELS)))
    # one source after the other, not a matrix product: its rounding depends on the processor
    for j, source in enumerate(sources):
        in_noise += source[:, None] * LOADS[:, j]
    progress = np.clip((np.arange(samples) - drift_start) / (samples - drift_start), 0.0, 1.0)
    progress *= min(1.0, samples / DRIFT_SAMPLES)
    for name, load in DRIFT.items():
        in_noise[:, NAMES.index(name)] += load * progress * sources[0]
    for name, shift in REGIME.items():
        in_noise[regime_start:, NAMES.index(name)] += shift
    for fault in faults:
        rows = slice(fault["start"], fault["end"])
        run = course(fault["kind"], fault["end"] - fault["start"])
        for name, size in fault.pop("shape").items():
            in_noise[rows, NAMES.index(name)] += size * run
            fault.setdefault("channels", []).append(name)

    values = np.empty_like(in_noise)
    for i, (_, mean, noise, decimals, _) in enumerate(CHANNELS):
        values[:, i] = np.round(mean + noise * in_noise[:, i], decimals)
    truth = {
        "seed": seed,
        "samples": samples,
        "faults": faults,
        "drift": {"start": drift_start, "end": samples, "channels": list(DRIFT)},
        "regime": {"start": regime_start, "end": samples, "channels": list(REGIME)},
    }
    return values, truth


def write(path: Path, values: np.ndarray) -> None:
    """Write the feed in the format that the ending of ``path`` names."""
    moments = START + STEP_SECONDS * np.arange(len(values))
    if path.suffix == ".csv":
        line = ",".join(["%s", *(f"%.{channel[3]}f" for channel in CHANNELS)]) + "\n"
        with path.open("w", encoding="ascii", newline="") as file:
            file.write(",".join(["time", *NAMES]) + "\n")
            for moment, row in zip(np.datetime_as_string(moments), values, strict=True):
                file.write(line % (moment, *row.tolist()))
        return
    columns = [pa.array(moments.astype("datetime64[ms]")), *(pa.array(c) for c in values.T.copy())]
    table = pa.table(columns, names=["time", *NAMES])
    if path.suffix == ".parquet":
        pq.write_table(table, path, row_group_size=8192)
    else:
        with pa.ipc.new_file(path, table.schema) as file:
            file.write_table(table, max_chunksize=8192)


def main(arguments: list[str] | None = None) -> int:
    """Make the feed and the truth as the command line says."""
    parser = argparse.ArgumentParser(
        description=(__doc__ or "").split("\n\n")[0],
        epilog="example: python examples/make_feed.py --seed 1 --samples 20000 "
        "--out feed.csv --truth truth.json",
    )
    parser.add_argument("--seed", type=int, default=2026, help="of the random numbers")
    parser.add_argument("--samples", type=int, default=20_000, help=f"at least {LEAST_SAMPLES}")
    parser.add_argument("--out", type=Path, required=True, help="FEED.csv, .parquet or .arrow")
    parser.add_argument("--truth", type=Path, required=True, help="TRUTH.json")
    options = parser.parse_args(arguments)
    if options.samples < LEAST_SAMPLES:
        parser.error(
            f"--samples {options.samples}: at least {LEAST_SAMPLES}, or the faults, the regime "
            "and a baseline of 2,000 samples have no room"
        )
    if options.seed < 0:
        parser.error(f"--seed {options.seed}: a seed is at least 0")
    if options.out.suffix not in (".csv", ".parquet", ".arrow"):
        parser.error(f"--out {options.out}: the ending is one of .csv, .parquet, .arrow")
    values, truth = make(options.seed, options.samples)
    write(options.out, values)
    options.truth.write_text(json.dumps(truth, indent=2) + "\n", encoding="ascii")
    return 0


if __name__ == "__main__":
    sys.exit(main())
