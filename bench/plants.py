"""Simulated feeds for the questions about detection: sources shared by noisy channels, faults."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis import NoveltyMonitor

BASELINE = 5000


def white(rng: np.random.Generator, m: int, n: int) -> NDArray[np.float64]:
    """Return normal noise of unit variance."""
    return rng.standard_normal((m, n))


def laplace(rng: np.random.Generator, m: int, n: int) -> NDArray[np.float64]:
    """Return Laplace noise of unit variance."""
    return rng.laplace(scale=0.5**0.5, size=(m, n))


def student(rng: np.random.Generator, m: int, n: int) -> NDArray[np.float64]:
    """Return Student t noise with 5 degrees of freedom, scaled to unit variance."""
    return rng.standard_t(5, size=(m, n)) * 0.6**0.5


def autoregressive(rng: np.random.Generator, m: int, n: int) -> NDArray[np.float64]:
    """Return normal AR(1) noise of unit variance, coefficient 0.7."""
    from scipy.signal import lfilter

    start = rng.standard_normal((1, n)) * 0.7
    shocks = rng.standard_normal((m, n)) * 0.51**0.5
    return np.asarray(lfilter([1.0], [1.0, -0.7], shocks, axis=0, zi=start)[0])


NOISES: dict[str, Callable[[np.random.Generator, int, int], NDArray[np.float64]]] = {
    "Gaussian": white,
    "Laplace": laplace,
    "Student t, 5": student,
    "AR(1), 0.7": autoregressive,
}


class Plant:
    """Channels that share sources, each with noise of its own size."""

    def __init__(self, seed: int, n: int, sources: int, noise: str = "Gaussian") -> None:
        self.rng = np.random.default_rng([seed, n, sources])
        self.n, self.sources = n, sources
        self.noise = NOISES[noise]
        self.sizes = np.exp(self.rng.uniform(np.log(0.3), np.log(3.0), n))
        self.loads = 1.5 * self.rng.standard_normal((sources, n))

    def run(self, m: int) -> NDArray[np.float64]:
        """Return ``m`` samples of ordinary running."""
        out = self.noise(self.rng, m, self.n)
        out *= self.sizes
        out += self.rng.standard_normal((m, self.sources)) @ self.loads
        return out


def sources_of(n: int) -> int:
    """Return how many sources a plant of so many channels has here."""
    return max(2, min(8, n // 8 + 1))


def with_fault(
    plant: Plant, feed: NDArray[np.float64], fault: NDArray[np.float64], start: int, stop: int
) -> NDArray[np.float64]:
    """Return a feed with a fault, given in noise units, added to some of its samples."""
    out = feed.copy()
    out[start:stop] += fault * plant.sizes
    return out


def trained(plant: Plant, **settings: Any) -> tuple[NoveltyMonitor, NDArray[np.float64]]:
    """Return a monitor with its baseline, and the projection on its residual space."""
    monitor = NoveltyMonitor(plant.n, baseline=BASELINE, **settings)
    monitor.push_many(plant.run(BASELINE))
    vectors = monitor.basis.vectors / monitor.scale
    return monitor, np.eye(plant.n) - vectors.T @ vectors


def visible(
    plant: Plant, monitor: NoveltyMonitor, outside: NDArray[np.float64],
    shape: NDArray[np.float64], times: float, limit: float,
) -> NDArray[np.float64]:  # fmt: skip
    """Scale a fault, in noise units, so that it alone makes so many times the limit."""
    seen = outside @ (shape * plant.sizes / monitor.scale)
    return np.asarray(shape * np.sqrt(times * limit) / np.linalg.norm(seen))
