"""What sampled counts say of a compartment: covariances, and the time spent at each count. counts : (R, G, N), time_s : (G,)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
BINS = 64


def covariance(time_s: Array, counts: NDArray[np.int64], span_s: tuple[float, float]) -> Array:
    """Covariance of counts over the samples within the span, shape=(replicates, species, species); NaN for fewer than two."""
    part = _within(time_s, counts, span_s).astype(float)
    if part.shape[1] < 2:
        return np.full((len(part), part.shape[2], part.shape[2]), np.nan)
    away = part - part.mean(axis=1, keepdims=True)
    return np.asarray(np.einsum("rti,rtj->rij", away, away) / part.shape[1])


def occupancy(
    time_s: Array, counts: NDArray[np.int64], span_s: tuple[float, float], bin_width: NDArray[np.int64]
) -> Array:
    """Time at each count within the span, s, shape=(replicates, species, bins); the last bin holds all larger counts."""
    part = _within(time_s, counts, span_s)
    replicates, samples, species = part.shape
    bins = np.minimum(part // bin_width, BINS - 1)
    place = (np.arange(replicates)[:, None, None] * species + np.arange(species)) * BINS + bins
    number = np.bincount(place.ravel(), minlength=replicates * species * BINS).reshape(replicates, species, BINS)
    return np.asarray(number * ((span_s[1] - span_s[0]) / max(1, samples)))


def _within(time_s: Array, counts: NDArray[np.int64], span_s: tuple[float, float]) -> NDArray[np.int64]:
    return counts[:, (time_s >= span_s[0]) & (time_s <= span_s[1])]
