"""How much correlated draws are worth: autocovariances, effective sizes, R-hat and rank normalisation.

Every function works on arrays whose last two axes are (chains, draws); leading axes are independent problems.
Nothing here decides anything: the numbers go to `fellwalk.judge`.
"""

import numpy as np
from scipy import fft, special

Array = np.ndarray

# When successive draws are opposed the sum of autocorrelations nearly cancels, and an effective size is then mostly
# noise, so it is cut off at this multiple of the number of draws. Measured before the cut, over 500 runs of 4 x 1000
# draws of a first-order autoregression (estimate in multiples of the number of draws, relative spread): coefficient
# -0.3, exactly 1.86: 1.90, 8%; -0.5, exactly 3: 3.3, 13%; -0.6, exactly 4: 4.8, 17%; at -0.7 it diverges in some
# runs, and with 4 x 100 draws already at -0.5 (at -0.3 there: 2.5, 31%). The cut can only overstate an error.
LARGEST_GAIN = 2.0


def _chain_means(x: Array) -> Array:
    # Summing differences from the first draw makes the mean of a frozen chain exact, so that its variance is 0.
    return x[..., 0] + np.mean(x - x[..., :1], axis=-1)


def autocovariance(x: Array) -> Array:
    """Autocovariance along the last axis at lags 0 .. n-1, every lag divided by n (the biased, positive form).

    x: (..., n). Returns (..., n). By FFT, padded so that nothing wraps around.
    """
    n = x.shape[-1]
    centred = x - _chain_means(x)[..., None]
    size = fft.next_fast_len(2 * n - 1, real=True)
    spectrum = fft.rfft(centred, size, axis=-1)
    power = spectrum.real**2 + spectrum.imag**2
    return fft.irfft(power, size, axis=-1)[..., :n] / n


def effective_size(x: Array, largest_gain: float = LARGEST_GAIN) -> Array:
    """Effective sample size of the mean over all chains; NaN where no draw differs from another.

    x: (..., chains, n), n >= 2. Returns (...). Autocorrelations combine the chains' own with the variance between
    chains (Vehtari, Gelman, Simpson, Carpenter & Buerkner 2021, Bayesian Analysis 16); they are summed by the
    initial monotone sequence (Geyer 1992, Statistical Science 7). At most largest_gain times the number of draws.
    """
    chains, n = x.shape[-2:]
    covariance = autocovariance(x).mean(axis=-2) * (n / (n - 1))
    within = covariance[..., 0]
    # A single chain has nothing between chains to add, and its correlations are its own.
    total = within * ((n - 1) / n) + _chain_means(x).var(axis=-1, ddof=1) if chains > 1 else within
    known = total > 0
    rho = 1 - (within[..., None] - covariance) / np.where(known, total, 1)[..., None]
    even = 2 * (n // 2)
    pairs = rho[..., 0:even:2] + rho[..., 1:even:2]
    kept = np.logical_and.accumulate(pairs > 0, axis=-1)
    falling = np.minimum.accumulate(pairs, axis=-1)
    time = -1 + 2 * np.sum(np.where(kept, falling, 0), axis=-1)
    return np.where(known, chains * n / np.maximum(time, 1 / largest_gain), np.nan)


def potential_scale_reduction(x: Array) -> Array:
    """R-hat of the chains as they are, not split, not ranked. NaN if nothing moves, infinite if only chains differ.

    x: (..., chains, n) with at least two chains. Returns (...). Gelman & Rubin (1992), Statistical Science 7, without
    the degrees-of-freedom factor, as in Vehtari et al. (2021).
    """
    n = x.shape[-1]
    means = _chain_means(x)
    within = (np.sum((x - means[..., None]) ** 2, axis=-1) / (n - 1)).mean(axis=-1)
    between = means.var(axis=-1, ddof=1)
    ratio = between / np.where(within > 0, within, 1)
    apart = np.where(between > 0, np.inf, np.nan)
    return np.where(within > 0, np.sqrt((n - 1) / n + ratio), apart)


def split(x: Array) -> Array:
    """Cut each chain in its two halves; the middle draw of an odd number is left out.

    x: (..., chains, n). Returns (..., 2 * chains, n // 2); halves of one chain are neighbours.
    """
    half = x.shape[-1] // 2
    halves = np.stack([x[..., :half], x[..., x.shape[-1] - half :]], axis=-2)
    return halves.reshape(*x.shape[:-2], 2 * x.shape[-2], half)


def average_ranks(flat: Array) -> Array:
    """Ranks from 1 along the last axis; equal values share the average of their ranks. (..., s) -> (..., s)."""
    size = flat.shape[-1]
    order = np.argsort(flat, axis=-1)
    ordered = np.take_along_axis(flat, order, axis=-1)
    position = np.arange(size)
    rises = ordered[..., 1:] != ordered[..., :-1]
    edge = np.ones((*flat.shape[:-1], 1), dtype=bool)
    first = np.maximum.accumulate(np.where(np.concatenate([edge, rises], axis=-1), position, 0), axis=-1)
    last = np.where(np.concatenate([rises, edge], axis=-1), position, size)
    last = np.minimum.accumulate(last[..., ::-1], axis=-1)[..., ::-1]
    ranks = np.empty(flat.shape)
    np.put_along_axis(ranks, order, (first + last) / 2 + 1, axis=-1)
    return ranks


def rank_normalise(x: Array) -> Array:
    """Replace draws by normal scores of their ranks over all chains, Phi^-1((r - 3/8) / (s + 1/4)).

    x: (..., chains, n). Returns the same shape. Vehtari et al. (2021), with Blom's (1958) fractional ranks.
    """
    flat = x.reshape(*x.shape[:-2], -1)
    return special.ndtri((average_ranks(flat) - 0.375) / (flat.shape[-1] + 0.25)).reshape(x.shape)


def fold(x: Array) -> Array:
    """Distances from the median over all chains, so that differences in spread show. (..., chains, n), same shape."""
    flat = np.sort(x.reshape(*x.shape[:-2], -1), axis=-1)
    size = flat.shape[-1]
    lower, upper = flat[..., (size - 1) // 2, None, None], flat[..., size // 2, None, None]
    # |x - (lower + upper) / 2|, in a form that keeps the two middle draws of an even number exactly level.
    return np.maximum(x - lower, upper - x) - (upper - lower) / 2


def quantile_error(ordered: Array, level: float, worth: Array) -> Array:
    """Monte Carlo standard error of a quantile: half the distance of the draws at the ends of its 68% interval.

    ordered: (..., s) sorted draws; level: 0 < level < 1; worth: (...) effective size of the indicator
    "draw <= quantile". Returns (...). The interval is that of Beta(worth * level + 1, worth * (1 - level) + 1), as in
    Vehtari et al. (2021), at one normal standard deviation to each side.
    """
    size = ordered.shape[-1]
    a, b = worth * level + 1, worth * (1 - level) + 1
    ends = [special.betaincinv(a, b, special.ndtr(side)) for side in (-1.0, 1.0)]
    below = np.clip(np.floor(size * ends[0]).astype(np.int64), 1, size) - 1
    above = np.clip(np.ceil(size * ends[1]).astype(np.int64), 1, size) - 1
    at = [np.take_along_axis(ordered, k[..., None], axis=-1)[..., 0] for k in (below, above)]
    return (at[1] - at[0]) / 2


def longest_stand(x: Array) -> Array:
    """Length of the longest run of equal successive draws, at least 1. x: (..., n). Returns int64 (...)."""
    n = x.shape[-1]
    position = np.arange(n)
    fresh = np.ones(x.shape, dtype=bool)
    fresh[..., 1:] = x[..., 1:] != x[..., :-1]
    start = np.maximum.accumulate(np.where(fresh, position, 0), axis=-1)
    return (position - start).max(axis=-1) + 1
