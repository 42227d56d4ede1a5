"""Follow the bearings of moving sources with a line of hydrophones, and count the sources.

    python examples/bearings.py --sensors 16 --snapshots 12000 --out BEARINGS.png

A line of hydrophones half a wavelength apart (or of antennas: the algebra is the same) gives one
complex value per sensor and snapshot. A source at bearing θ adds its signal times
(1, z, z², ...), z = exp(iπ·sin θ), so the snapshots of d sources lie in d directions, plus noise.
A PrincipalBasis with a short half-life keeps that subspace up to date and counts the sources by
minimum description length. The bearings are the angles of the roots of a polynomial made from the
part of space that the subspace leaves (root-MUSIC): no grid of directions to search.

Two sources cross the field of view, a third comes and goes. Sea, ships and figures are made up.

References
----------
Barabell (1983), "Improving the resolution performance of eigenstructure-based direction-finding
algorithms", Proc. ICASSP 8:336 (the roots).
Wax & Kailath (1985), "Detection of signals by information theoretic criteria", IEEE Trans. ASSP
33:387 (the count).
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np

from streambasis import PrincipalBasis

NOISE = 1.0
POWERS = (6.0, 4.0, 5.0)
"""Power of each source at one sensor, in units of the noise there."""
READINGS = 120


def true_bearings(count: int) -> np.ndarray:
    """Return the bearings of three invented sources in degrees, (count, 3); NaN while silent."""
    t = np.linspace(0.0, 1.0, count)
    bearings = np.stack([-50 + 55 * t, 35 - 20 * np.sin(2.2 * t), 62 - 30 * t], axis=1)
    bearings[(t < 0.35) | (t > 0.8), 2] = np.nan
    return bearings


def snapshots(bearings: np.ndarray, sensors: int, rng: np.random.Generator) -> np.ndarray:
    """Return what the sensors hear, (snapshots, sensors): sources at these bearings, and noise."""

    def normal(*shape: int) -> np.ndarray:
        return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)

    heard = np.sqrt(NOISE) * normal(len(bearings), sensors)
    for power, bearing in zip(POWERS, bearings.T, strict=True):
        loud = ~np.isnan(bearing)
        phases = np.pi * np.sin(np.radians(bearing[loud]))[:, None] * np.arange(sensors)
        heard[loud] += np.sqrt(power) * normal(int(loud.sum()), 1) * np.exp(1j * phases)
    return heard


def bearings_of(vectors: np.ndarray) -> np.ndarray:
    """Return the bearings in degrees, ascending, of the sources whose snapshots span ``vectors``.

    The squared length of what the subspace leaves of (1, z, z², ...) is, on the unit circle, a
    polynomial in z and 1/z with the sums of the diagonals of I - VᵀV̄ as coefficients. Its roots
    come in pairs about the circle; those inside and nearest to it are the sources.
    """
    rank, sensors = vectors.shape
    left = np.eye(sensors) - vectors.T @ vectors.conj()
    coefficients = [np.trace(left, offset=k) for k in range(sensors - 1, -sensors, -1)]
    roots = np.roots(coefficients)
    inside = roots[np.abs(roots) < 1.0]
    nearest = inside[np.argsort(-np.abs(inside))[:rank]]
    return np.sort(np.degrees(np.arcsin(np.angle(nearest) / np.pi)))


def draw(path: Path, at: np.ndarray, found: list[np.ndarray], truth: np.ndarray) -> None:
    """Draw the bearings found over the true ones, and how many sources were counted."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 6), layout="constrained")
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1))
    upper.plot(truth, color="0.75", linewidth=4, label=["where they are", None, None])
    place = np.repeat(at, [len(each) for each in found])
    upper.plot(place, np.concatenate(found), ".", color="C0", markersize=4, label="found")
    upper.set_ylabel("bearing, degrees")
    upper.legend(loc="upper left")
    lower.plot((~np.isnan(truth)).sum(axis=1), color="0.75", linewidth=4)
    lower.step(at, [len(each) for each in found], color="C0", where="post")
    lower.set(ylabel="sources", xlabel="snapshot", ylim=(0, 4.5))
    figure.savefig(path, dpi=110)


def main(arguments: list[str] | None = None) -> int:
    """Follow invented sources and say how well."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--sensors", type=int, default=16, help="hydrophones in the line")
    parser.add_argument("--snapshots", type=int, default=12_000)
    parser.add_argument(
        "--half-life",
        type=float,
        default=40.0,
        help="snapshots; a source that moves a tenth of a beam in that time counts as two",
    )
    parser.add_argument("--seed", type=int, default=8, help="of the random numbers")
    parser.add_argument("--out", type=Path, help="picture of the bearings (.png, .svg, .pdf)")
    options = parser.parse_args(arguments)

    truth = true_bearings(options.snapshots)
    heard = snapshots(truth, options.sensors, np.random.default_rng(options.seed))
    basis = PrincipalBasis(
        options.sensors, dtype="complex128", rank="mdl", half_life=options.half_life
    )
    ends = np.linspace(0, len(heard), READINGS + 1).astype(int)[1:]
    # what the basis shows is as old as what it remembers is on average
    age = int(options.half_life / np.log(2))
    found, errors, right = [], [], 0
    print("snapshot  sources  bearings found (true), degrees")
    for start, end in zip([0, *ends[:-1]], ends, strict=True):
        basis.push_many(heard[start:end])
        now = bearings_of(basis.vectors)
        found.append(now)
        then = truth[max(0, end - 1 - age)]
        then = np.sort(then[~np.isnan(then)])
        if len(now) == len(then):
            right += 1
            errors.extend(np.abs(now - then))
        if len(found) % (READINGS // 10) == 0:
            true_now = truth[end - 1][~np.isnan(truth[end - 1])]
            text = ", ".join(f"{bearing:.1f}" for bearing in now)
            print(f"{end:8d}  {len(now):7d}  {text} ({', '.join(f'{b:.1f}' for b in true_now)})")
    print(f"\ncounted right in {right} of {len(found)} readings")
    print(f"median error of a bearing then {np.median(errors):.2f} degrees, {age} snapshots late")
    print(f"noise per sensor {basis.noise:.3f} (true {NOISE:.3f}); ", end="")
    print(f"orthogonality {basis.audit().orthogonality:.2f} (sound below 3)")
    if options.out:
        draw(options.out, ends, found, truth)
    return 0


if __name__ == "__main__":
    sys.exit(main())
