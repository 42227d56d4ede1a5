"""Add the golden snapshots that are missing: ``python tests/golden/make.py``.

A file that is there is never written again: it stands for what this version of the format meant
when it was made. Beside each snapshot lies a JSON file with what it must load as.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

FOLDER = Path(__file__).parent
sys.path.insert(0, str(FOLDER.parent.parent))

import streambasis  # noqa: E402 - from the clone that this file lies in
from streambasis.seal import VERSION  # noqa: E402

CHANNELS = ["inlet", "outlet", "Vorlauf °C", "speed", "vibration"]


def samples(count: int, *, seed: int = 1) -> Any:
    """Return samples of two sources and noise."""
    rng = np.random.default_rng(seed)
    sources = np.random.default_rng(0).normal(size=(2, len(CHANNELS)))
    return rng.normal(size=(count, 2)) @ sources + 0.1 * rng.normal(size=(count, len(CHANNELS)))


def stream() -> Any:
    """Return a basis without a window, in complex numbers and with weights."""
    basis = streambasis.StreamBasis(
        CHANNELS, dtype="complex128", inner=[1.0, 2.0, 0.5, 1.0, 4.0], capacity=4
    )
    basis.push_many(samples(3) + 1j * samples(3, seed=2))
    return basis


def window() -> Any:
    """Return a basis over a window with times, more samples than directions, and one taken back."""
    basis = streambasis.StreamBasis(CHANNELS, window=12, span=60, capacity=3)
    basis.push_many(samples(40), at=np.arange(40) * 0.5)
    basis.retract(33)
    return basis


def principal() -> Any:
    """Return a principal basis with samples that wait for their block."""
    basis = streambasis.PrincipalBasis(CHANNELS, rank=2, half_life=500, centre=True, block=16)
    basis.push_many(samples(300))
    return basis


def learning() -> Any:
    """Return a monitor in its baseline."""
    monitor = streambasis.NoveltyMonitor(CHANNELS, baseline=200)
    monitor.push_many(samples(20))
    return monitor


def monitor() -> Any:
    """Return a monitor with a closed and labelled event, an adopted one and an open one."""
    found = streambasis.NoveltyMonitor(CHANNELS, baseline=400, false_alarm=1e-3)
    feed = samples(2000)
    feed[700:760, 3] += 4
    feed[1000:1060, 1] += 4
    feed[1980:, 3] += 4
    found.push_many(feed, at=np.arange(2000) * 0.5)
    found.label(0, "belt slips")
    found.adopt(1)
    return found


MAKERS: dict[str, Callable[[], Any]] = {
    "stream": stream,
    "window": window,
    "principal": principal,
    "learning": learning,
    "monitor": monitor,
}


def facts(obj: Any) -> dict[str, Any]:
    """Return what an object says of itself, exactly."""
    told: dict[str, Any] = {
        "kind": type(obj).__name__,
        "channels": list(obj.channels),
        "count": obj.count,
    }
    basis = obj
    if isinstance(obj, streambasis.NoveltyMonitor):
        told["baseline_done"] = obj.baseline_done
        if not obj.baseline_done:
            return told
        basis = obj.basis
        told |= {
            "events": [dict(event) for event in obj.events],
            "adopted": list(obj.adopted),
            "scale": obj.scale.tolist(),
        }
    told["rank"] = basis.rank
    told["real"] = basis.vectors.real.tolist()
    told["imaginary"] = basis.vectors.imag.tolist()
    if isinstance(basis, streambasis.PrincipalBasis):
        told |= {"energies": basis.energies.tolist(), "noise": basis.noise}
    else:
        told["pivots"] = basis.pivots.tolist()
        if basis.window is not None:
            told["members"] = basis.members.tolist()
    return told


def main() -> None:
    """Make what is missing."""
    for name, make in MAKERS.items():
        path = FOLDER / f"{name}.v{VERSION}.arrow"
        if not path.exists():
            obj = make()
            streambasis.save(obj, path, mode=0o644)
            text = json.dumps(facts(obj), indent=1, ensure_ascii=False)
            path.with_suffix(".json").write_text(text + "\n")
            print(path)


if __name__ == "__main__":
    main()
