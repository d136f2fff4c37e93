"""The errors that a result states of its estimates: against other estimates of them, and against the true scatter."""

import numpy as np
import pytest
import sampling
import stat_checks
from scipy import stats

LEVELS = {"low": 0.05, "middle": 0.5, "high": 0.95}


@pytest.mark.parametrize(
    ("name", "way"),
    [
        ("mcmc01", "leapfrog, no-u-turn"),
        ("Norris", "leapfrog, jittered"),
        ("Pontius", "surrogate, no-u-turn"),
        ("student", "surrogate semi-explicit, jittered"),
        ("ring", "product, no-u-turn"),
        ("schools", "leapfrog, no-u-turn"),
    ],
)
def test_stated_errors_agree_with_independent_estimates(name, way):
    """Of one set of draws: means and sds within 10% of Geyer's estimate and 25% of batch means, quantiles within 40%.

    Batch means of 141 draws scatter by 4% (some 560 batches) and lose a part 1/141 of the autocorrelation time.
    Where the tails put the error of an sd in doubt it is stated wider, at most twice. Errors of quantiles are errors
    of probabilities over the slope of the empirical cdf, here taken over four errors on both sides; those two slopes
    may differ by a quarter.
    """
    result = sampling.draw(name, way, keep=20_000, seed=31)
    judged = result.judgement
    bad = []
    for i in range(result.draws.shape[2]):
        x = result.draws[..., i]
        squares = (x - x.mean()) ** 2
        pairs = {
            "mean, Geyer": (judged.error[i], stat_checks.geyer_error(x), 1.1),
            "mean, batches": (judged.error[i], stat_checks.batch_means_error(x)[0], 1.25),
            "sd, Geyer": (judged.spread_error[i], stat_checks.geyer_error(squares) / (2 * x.std()), 1.1),
        }
        wider = {"sd, Geyer"} if judged.spread_in_doubt[i] else set()
        for which, level in LEVELS.items():
            error = stat_checks.geyer_error((x <= getattr(judged, which)[i]).astype(float))
            low, high = np.quantile(x, [level - 4 * error, level + 4 * error])
            pairs[f"quantile {level}"] = (getattr(judged, f"{which}_error")[i], (high - low) / 8, 1.4)
        bad += [
            f"{name} x[{i}] {what}: stated {stated:.4g}, otherwise {other:.4g}"
            for what, (stated, other, factor) in pairs.items()
            if not other / factor <= stated <= other * (2.0 if what in wider else factor)
        ]
    assert not bad, "\n".join(bad)


def test_stated_errors_are_the_true_scatter():
    """200 runs of 4 x 1000 draws: what estimates miss the truth by, over the stated errors, is 1 within 32%.

    The root mean square of 200 standard normals scatters by 5.0%; the limit used, at the rate FALSE_ALARM for all
    quantities of a test together, is about 25%; 5% are left to the noise and skewness of estimates from few draws.
    """
    runs = 200
    known = [m for m in sampling.target("mcmc01").marginals.values() if isinstance(m.of, int)]
    missed = []
    for seed in range(runs):
        judged = sampling.draw("mcmc01", "leapfrog, no-u-turn", keep=1000, seed=4000 + seed).judgement
        row = []
        for marginal in known:
            i = marginal.of
            row.append((judged.estimate[i] - marginal.mean) / judged.error[i])
            row.append((judged.spread[i] - marginal.sd) / judged.spread_error[i])
            for which, level in LEVELS.items():
                off = getattr(judged, which)[i] - float(marginal.law.ppf(level))
                row.append(off / getattr(judged, f"{which}_error")[i])
        missed.append(row)
    ratio = np.sqrt((np.array(missed) ** 2).mean(axis=0))
    rate = sampling.FALSE_ALARM / (2 * ratio.size)
    low, high = np.sqrt(stats.chi2.ppf([rate, 1 - rate], runs) / runs) * [0.95, 1.05]
    assert high < 1.32
    assert low > 0.72
    assert np.all((low < ratio) & (ratio < high)), f"misses over stated errors: {np.round(ratio, 2)}, not 1"
