"""Serial correlation of residuals, in the files' own row order."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.plan import Sample

Floats = NDArray[np.float64]

_FEWEST_PAIRS = 100
_MOST_LAGS = 1000
_CLIPPED_SD = 5.0
_FADED = 0.05


def autocorrelation(
    z: Floats, run: NDArray[np.int64], place: NDArray[np.int64], lags: int
) -> Floats:
    """Return the autocorrelation of residuals at lags 0, 1, ..., over pairs of one run.

    Parameters
    ----------
    z : (n,) float64
        Residuals, in row order within each run; NaN rows take no part.
    run : (n,) int64
        Which run of consecutive rows.
    place : (n,) int64
        Place within the run, rows that were dropped counted: closing their gaps would join rows
        that were not neighbours.
    lags : int
        Largest lag.

    Returns
    -------
    (lags + 1,) float64
        sum of products over pairs / pairs / variance; NaN at lags with fewer than 100 pairs
        (fewer than one for samples below 200 rows).
    """
    used = np.isfinite(z)
    z, run, place = z[used], run[used], place[used]
    out = np.full(lags + 1, np.nan)
    if not z.size:
        return out
    fewest = _FEWEST_PAIRS if z.size >= 2 * _FEWEST_PAIRS else 1
    # On a line of places with gaps between runs, a lag is one shifted product.
    length = int(place.max()) + lags + 2
    line = np.zeros((int(run.max()) + 1) * length)
    known = np.zeros(line.shape[0])
    line[run * length + place] = z
    known[run * length + place] = 1.0
    variance = float(np.sum(z * z)) / z.size
    if variance <= 0.0:
        return out
    out[0] = 1.0
    for lag in range(1, lags + 1):
        pairs = float(np.sum(known[:-lag] * known[lag:]))
        if pairs >= fewest:
            out[lag] = float(np.sum(line[:-lag] * line[lag:])) / pairs / variance
    return out


def serial_facts(z: Floats, sample: Sample, rows: int) -> dict[str, Any] | None:
    """Describe how residuals of neighbouring rows resemble each other.

    Parameters
    ----------
    z : (n,) float64
        Standardised residuals of the sample's rows.
    sample : Sample
        Runs of consecutive rows.
    rows : int
        Rows in all.

    Returns
    -------
    dict or None
        ``lag_one``; ``pairs`` behind it; ``reach_rows``, the lag at which the correlation has
        faded below 0.05; ``worth_rows``, n / (1 + 2 sum rho_k) up to that lag (Bayley &
        Hammersley 1946, J. R. Stat. Soc. Suppl. 8:184); None with fewer than 100 pairs.
    """
    # A few wild readings must not hide the likeness of the others.
    z = np.clip(z, -_CLIPPED_SD, _CLIPPED_SD)
    neighbours = (sample.run[1:] == sample.run[:-1]) & (np.diff(sample.place) == 1)
    pairs = int(np.count_nonzero(neighbours & np.isfinite(z[1:]) & np.isfinite(z[:-1])))
    if pairs < _FEWEST_PAIRS:
        return None
    longest = int(np.bincount(sample.run).max())
    lags = 1
    while True:
        rho = autocorrelation(z, sample.run, sample.place, lags)
        faded = np.flatnonzero(~(rho[1:] > _FADED))
        if faded.size or lags >= min(_MOST_LAGS, longest // 2):
            break
        lags = min(2 * lags, _MOST_LAGS)
    if not math.isfinite(rho[1]):
        return None
    reach = int(faded[0]) + 1 if faded.size else lags
    total = 1.0 + 2.0 * float(np.sum(np.clip(rho[1:reach], 0.0, None)))
    return {
        "lag_one": float(rho[1]),
        "pairs": pairs,
        "reach_rows": reach,
        "worth_rows": max(1.0, rows / total),
    }
