"""The effective size of series that forget quickly, lag by lag: the numbers of `fellwalk.autocorrelation`, sooner.

The initial monotone sequence (Geyer 1992) stops at the first pair of autocorrelations with a sum that is not positive.
For series that a few draws decorrelate that is after a few lags, and transforms of the whole series are not needed.
"""

import numpy as np

from fellwalk import autocorrelation as ac

Array = np.ndarray

PAIRS = 12  # of lags looked at one by one; what goes on longer is left to the transforms


def effective_size(x: Array) -> Array:
    """As `fellwalk.autocorrelation.effective_size`, to rounding, for x of shape (series, chains, n), n >= 2."""
    count, chains, n = x.shape
    centred = x - x.mean(axis=2, keepdims=True)
    within = _products(centred, 0) / (n - 1)
    total = within * ((n - 1) / n)
    total = total + x.mean(axis=2).var(axis=1, ddof=1) if chains > 1 else within
    worth = np.full(count, np.nan)
    # A series that is constant but for rounding has no correlations of its own; the exact arithmetic settles it.
    scale = np.abs(x[:, 0, 0])
    plain = total > (1e-12 * scale) ** 2
    worth[~plain] = ac.effective_size(x[~plain]) if (~plain).any() else np.nan
    at = np.flatnonzero(plain)
    series, sums, least = centred[at] if at.size < count else centred, np.zeros(at.size), np.full(at.size, np.inf)
    for pair in range(min(PAIRS, n // 2)):
        lags = [_products(series, 2 * pair + step) / (n - 1) for step in (0, 1)]
        both = sum(1 - (within[at] - covariance) / total[at] for covariance in lags)
        going = both > 0
        worth[at[~going]] = _worth(sums[~going], chains * n)
        least = np.minimum(least, both)[going]
        sums = sums[going] + least
        at, series = at[going], series[going] if not going.all() else series
        if not at.size:
            return worth
    worth[at] = ac.effective_size(x[at]) if n // 2 > PAIRS else _worth(sums, chains * n)
    return worth


def _products(centred: Array, lag: int) -> Array:
    n = centred.shape[2]
    return np.einsum("scn,scn->s", centred[:, :, : n - lag], centred[:, :, lag:]) / centred.shape[1]


def _worth(sums: Array, draws: int) -> Array:
    return draws / np.maximum(2 * sums - 1, 1 / ac.LARGEST_GAIN)
