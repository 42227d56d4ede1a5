"""The monitor against the residual of a batch PCA, on open data with short baselines."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from sklearn.datasets import load_digits, load_wine
from sklearn.decomposition import PCA
from sklearn.metrics import roc_auc_score
from sklearn.preprocessing import StandardScaler

from streambasis import NoveltyMonitor

LEVEL = 0.006
"""How far below the batch PCA an area under the ROC curve may be on one class; on the average over
classes it may not be below by more than a tenth of it."""


def areas(data: Any, own: int) -> NDArray[np.float64]:
    """Return areas under the ROC curve of monitor, PCA residual, and the same standardized.

    Every second sample of a class (two of three for wine) is the baseline; the rest of it is told
    from the other classes. All have the rank that the monitor chose.
    """
    rows = np.flatnonzero(data.target == own)
    baseline = rows[::2] if len(rows) > 100 else rows[np.arange(len(rows)) % 3 > 0]
    rest = np.setdiff1d(np.arange(len(data.target)), baseline)
    monitor = NoveltyMonitor(data.data.shape[1], baseline=data.data[baseline])
    scores = [monitor.push_many(data.data[rest])["spe"].to_numpy()]
    for spread in (False, True):
        scaler = StandardScaler(with_std=spread).fit(data.data[baseline])
        pca = PCA(max(monitor.rank, 1)).fit(scaler.transform(data.data[baseline]))
        z = scaler.transform(data.data[rest])
        scores.append(np.sum((z - pca.inverse_transform(pca.transform(z))) ** 2, axis=1))
    return np.array([roc_auc_score(data.target[rest] != own, score) for score in scores])


def test_digits_are_told_as_well_as_by_batch_pca() -> None:
    """With any digit as reference, most pixels nearly constant, 90 samples of 64 channels do.

    Data: Alpaydin & Kaynak (1998), Optical Recognition of Handwritten Digits, as shipped with
    scikit-learn. Reference method: scikit-learn's PCA.
    """
    found = np.array([areas(load_digits(), digit) for digit in range(10)])
    best = found[:, 1:].max(axis=1)
    assert (found[:, 0] - best).min() >= -LEVEL
    assert found[:, 0].mean() >= best.mean() - LEVEL / 10
    assert found[:, 0].mean() > found[:, 2].mean() + LEVEL


@pytest.mark.parametrize("own", [0, 2])
def test_wine_is_told_in_unlike_units(own: int) -> None:
    """With 13 channels three powers of ten apart the monitor is not below either residual.

    Data: Forina et al. (1988), PARVUS, as shipped with scikit-learn.
    """
    found = areas(load_wine(), own)
    assert found[0] >= found[1:].max() - LEVEL
