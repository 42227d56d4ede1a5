"""What a monitor learns from its baseline, limits included, before it judges anything."""

from __future__ import annotations

from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from streambasis.monitor.scaling import MOST_COVARIANCE, Scaling, fit_scaling

FOLDS = 5
"""The baseline is judged fifth by fifth, each by a basis fitted on the other four."""

IMPUTATIONS = 2
"""Rounds of filling in what is missing and fitting again."""

LEAST_COMPLETE = 32
"""Fewer samples without gaps give no tail to fit a limit to."""


class Learnt(NamedTuple):
    """What a baseline teaches.

    Attributes
    ----------
    scaling : Scaling
        Centre, noise and rank.
    z : ndarray of float64, shape (m, n)
        Those samples of the baseline that are fit to learn from, about the centre and in noise
        units, outliers drawn in, gaps filled.
    spe : ndarray of float64
        Squared prediction errors of its complete samples by cross-fitting, in order of time.
    roots : ndarray of float64
        Eigenvalues of the covariance that the basis leaves out.
    """

    scaling: Scaling
    z: NDArray[np.float64]
    spe: NDArray[np.float64]
    roots: NDArray[np.float64]


def learn(samples: NDArray[np.float64], rank: int | None, most: int | None) -> Learnt:
    """Learn from ordinary running.

    Parameters
    ----------
    samples : ndarray of float64, shape (m, n)
        The baseline; NaN marks a missing value.
    rank : int, optional
        Number of directions where it is known.
    most : int, optional
        Most directions.

    Returns
    -------
    Learnt
        As described there.

    Notes
    -----
    The limits must come from samples that the basis was not fitted on: in-sample SPE is too small
    by the degrees of freedom that the fit took. Folds are runs of consecutive samples, so that
    correlation over time does not leak from one to the other. Missing values are filled in with
    what the fit expects and noise of the channel's size (always the same), and everything is
    fitted again, twice: without the noise a channel with many gaps would seem to have little.
    """
    gaps = np.isnan(samples)
    scaling, z, fit = fit_scaling(samples, rank=rank, most=most)
    holes = gaps & ~gaps.all(axis=0)
    for _ in range(IMPUTATIONS if holes.any() else 0):
        mean, vectors = principal(z[fit], scaling.rank)
        expected = _expected(z, holes, mean, vectors)
        expected += np.random.default_rng(0).standard_normal(z.shape)
        filled = samples.copy()
        filled[holes] = (scaling.centre + scaling.scale * expected)[holes]
        scaling, z, fit = fit_scaling(filled, rank=rank, most=most)
    raw = (samples - scaling.centre) / scaling.scale
    edges = np.linspace(0, len(z), FOLDS + 1).astype(int)
    spe = np.empty(len(z))
    for start, stop in pairwise(edges.tolist()):
        rest = fit.copy()
        rest[start:stop] = False
        mean, vectors = principal(z[rest], scaling.rank)
        spe[start:stop] = _errors(raw[start:stop], mean, vectors)
    z = z[fit]
    values = np.linalg.svd(z - z.mean(axis=0), compute_uv=False) ** 2 / len(z)
    return Learnt(scaling, z, _comparable(spe, gaps, scaling.rank), values[scaling.rank :])


def principal(z: NDArray[Any], rank: int) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return the mean of rows and their leading directions about it."""
    mean = z.mean(axis=0)
    deviations = z - mean
    m, n = deviations.shape
    if n <= min(m, MOST_COVARIANCE):
        _, columns = np.linalg.eigh(deviations.T @ deviations)
        return mean, np.ascontiguousarray(columns.T[::-1][:rank])
    values, columns = np.linalg.eigh(deviations @ deviations.T)
    leading = columns.T[::-1][:rank] @ deviations
    return mean, leading / np.sqrt(np.maximum(values[::-1][:rank], np.finfo(float).tiny))[:, None]


def _comparable(spe: NDArray[Any], gaps: NDArray[np.bool_], rank: int) -> NDArray[np.float64]:
    """Return the errors of samples without gaps, or of all in proportion where those are few.

    A channel without any value in the baseline is no gap.
    """
    missing = (gaps & ~gaps.all(axis=0)).sum(axis=1)
    if np.count_nonzero(missing == 0) >= LEAST_COMPLETE:
        return np.asarray(spe[missing == 0])
    free = gaps.shape[1] - np.count_nonzero(gaps.all(axis=0)) - rank
    left = free - missing
    return np.asarray(spe[left > 0] * (free / left[left > 0]))


def _errors(z: NDArray[Any], mean: NDArray[Any], vectors: NDArray[Any]) -> NDArray[Any]:
    """Return squared prediction errors, of samples with gaps on the channels observed."""
    gaps = np.isnan(z)
    deviations = z - mean
    odd = gaps.any(axis=1)
    deviations[odd] = np.nan_to_num(
        deviations[odd] + mean - _expected(z[odd], gaps[odd], mean, vectors)
    )
    deviations[~odd] -= (deviations[~odd] @ vectors.T) @ vectors
    return np.asarray(np.einsum("ij,ij->i", deviations, deviations))


def _expected(
    z: NDArray[Any], gaps: NDArray[np.bool_], mean: NDArray[Any], vectors: NDArray[Any]
) -> NDArray[np.float64]:
    """Return what the directions expect of samples, by least squares on what is no gap."""
    out = np.tile(mean, (len(z), 1))
    for i in np.flatnonzero(gaps.any(axis=1)):
        seen = ~gaps[i]
        a = np.linalg.lstsq(vectors[:, seen].T, (z[i] - mean)[seen], rcond=1e-6)[0]
        out[i] += a @ vectors
    return out
