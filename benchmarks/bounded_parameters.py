"""What `fellwalk.Parameters` cost beside the same model written in free coordinates by hand, both in C.

    python benchmarks/bounded_parameters.py            under a minute
    python benchmarks/bounded_parameters.py --quick    some seconds

Models: a line through 200 points with a positive noise and a share of outliers between 0 and 1 (what bounded parameters
are for: few of them, and a likelihood that costs more than they do); 30 groups with positive spreads; and the worst
case, d independent Poisson rates, where the model is nothing but an exponential for each coordinate. By hand twice:
"around" puts the change of variables around the same natural function; "rewritten" is the model worked out anew in free
coordinates, which then never takes the logarithm of a rate, since it has it already.
Before anything is timed all versions must give the same log density and gradient. "Gradient" is one call from C,
"transition" one of `Chain.advance` on jittered paths of 1..8 steps of the same length, all included.
"""

import argparse
import ctypes
import subprocess
import tempfile
from pathlib import Path

import numpy as np
from common import _build, busy, fw, interleaved, machine, short_time, table, timer
from scipy import LowLevelCallable

from fellwalk._core import count_disagreements

SOURCE = r"""
#include <math.h>
#include <stddef.h>
#define N 200
static double days[N], height[N];
void fill(const double *a, const double *b) { for (int i = 0; i < N; ++i) days[i] = a[i], height[i] = b[i]; }

/* log density of level, growth, noise, share (of outliers ten times as wide), gradient with respect to these */
static double line(double level, double growth, double noise, double share, double *g)
{
    double total = -0.5 * (level * level / 100 + growth * growth / 25 + noise * noise / 4);
    g[0] = -level / 100, g[1] = -growth / 25, g[2] = -noise / 4, g[3] = 0;
    const double c = 1 / noise;
    for (int i = 0; i < N; ++i) {
        const double m = (height[i] - level - growth * days[i]) * c, near = (1 - share) * exp(-0.5 * m * m) * c;
        const double far = 0.1 * share * exp(-0.005 * m * m) * c, p = near + far, w = (near + 0.01 * far) / p * m;
        total += log(p);
        g[0] += w * c;
        g[1] += w * c * days[i];
        g[2] += (w * m - 1) * c;
        g[3] += (far / share - near / (1 - share)) / p;
    }
    return total;
}
int line_natural(size_t d, const double *x, double *value, double *g, void *context)
{
    *value = line(x[0], x[1], x[2], x[3], g);
    return 0;
}
int line_by_hand(size_t d, const double *y, double *value, double *g, void *context)
{
    const double noise = exp(y[2]), share = 1 / (1 + exp(-y[3]));
    *value = line(y[0], y[1], noise, share, g) + y[2] + log(share) + log1p(-share);
    g[2] = g[2] * noise + 1;
    g[3] = g[3] * share * (1 - share) + 1 - 2 * share;
    return 0;
}

static int wrapped(int (*natural)(size_t, const double *, double *, double *, void *), size_t d, const double *y,
                   double *value, double *g)
{
    static double x[1000];
    double sum = 0;
    for (size_t i = 0; i < d; ++i) x[i] = exp(y[i]);
    natural(d, x, value, g, NULL);
    for (size_t i = 0; i < d; ++i) g[i] = g[i] * x[i] + 1, sum += y[i];
    *value += sum;
    return 0;
}
int line_wrapped(size_t d, const double *y, double *value, double *g, void *context)
{
    double x[4] = {y[0], y[1], exp(y[2]), 1 / (1 + exp(-y[3]))};
    line_natural(d, x, value, g, context);
    *value += y[2] + log(x[3]) + log1p(-x[3]);
    g[2] = g[2] * x[2] + 1;
    g[3] = g[3] * x[3] * (1 - x[3]) + 1 - 2 * x[3];
    return 0;
}

/* 30 groups: a spread each, half-normal; 10 values of it with mean 0, of which the sum of squares is known: 12.5 */
int spreads_natural(size_t d, const double *x, double *value, double *g, void *context)
{
    double total = 0;
    for (size_t i = 0; i < d; ++i) {
        const double c = 1 / x[i];
        total += -10 * log(x[i]) - 6.25 * c * c - 0.5 * x[i] * x[i];
        g[i] = -10 * c + 12.5 * c * c * c - x[i];
    }
    *value = total;
    return 0;
}
int spreads_by_hand(size_t d, const double *y, double *value, double *g, void *context)
{
    double total = 0;
    for (size_t i = 0; i < d; ++i) {
        const double x = exp(y[i]), c = 1 / x;
        total += -9 * y[i] - 6.25 * c * c - 0.5 * x * x;
        g[i] = -9 + 12.5 * c * c - x * x;
    }
    *value = total;
    return 0;
}

int spreads_wrapped(size_t d, const double *y, double *value, double *g, void *context)
{
    return wrapped(spreads_natural, d, y, value, g);
}

/* independent rates with a count of 3 and an exponential prior */
int rates_natural(size_t d, const double *x, double *value, double *g, void *context)
{
    double total = 0;
    for (size_t i = 0; i < d; ++i) {
        total += 3 * log(x[i]) - 2 * x[i];
        g[i] = 3 / x[i] - 2;
    }
    *value = total;
    return 0;
}
int rates_by_hand(size_t d, const double *y, double *value, double *g, void *context)
{
    double total = 0;
    for (size_t i = 0; i < d; ++i) {
        const double x = exp(y[i]);
        total += 4 * y[i] - 2 * x;
        g[i] = 4 - 2 * x;
    }
    *value = total;
    return 0;
}
int rates_wrapped(size_t d, const double *y, double *value, double *g, void *context)
{
    return wrapped(rates_natural, d, y, value, g);
}
"""
SIGNATURE = "int (size_t, const double *, double *, double *, void *)"


def library() -> ctypes.CDLL:
    """SOURCE compiled, its data filled in."""
    place = Path(tempfile.mkdtemp(prefix="fellwalk-bounded-"))
    (place / "models.c").write_text(SOURCE)
    subprocess.run([*_build.compiler(), *_build.FLAGS, "-w", "-o", str(place / "models.so"), str(place / "models.c"),
                    "-lm"], check=True)
    found = ctypes.CDLL(str(place / "models.so"))
    rng = np.random.default_rng(2)
    days = np.linspace(1.0, 12.0, 200)
    height = 3.0 + 3.1 * days + np.where(rng.random(200) < 0.1, 10, 1) * rng.standard_normal(200)
    found.fill(*(ctypes.c_void_p(a.ctypes.data) for a in (days, height)))
    return found


def density(code: ctypes.CDLL, name: str, what: object) -> fw.Density:
    """The C function `name` of a dimension or of parameters."""
    function = getattr(code, name)
    function.restype = ctypes.c_int
    function.argtypes = (ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p)
    return fw.Density(LowLevelCallable(function, signature=SIGNATURE), what)


def models() -> dict[str, tuple[str, fw.Parameters]]:
    """Name in the table -> name in C, parameters."""
    line = fw.Parameters(level=fw.free(), growth=fw.free(), noise=fw.positive(), share=fw.between(0.0, 1.0))
    return {
        "line, 4 parameters, 200 points": ("line", line),
        "30 spreads": ("spreads", fw.Parameters(spread=fw.positive(30))),
        "rates, d = 10": ("rates", fw.Parameters(rate=fw.positive(10))),
        "rates, d = 1000": ("rates", fw.Parameters(rate=fw.positive(1000))),
    }


def works(code: ctypes.CDLL, name: str, parameters: fw.Parameters, seconds: float) -> dict:
    """Timed works of one model, after its versions have been seen to agree."""
    y = 0.3 * np.random.default_rng(3).standard_normal(parameters.dimension)
    y = np.array([3.0, 3.1, 0.0, -2.2]) if name == "line" else y  # near the middle: no path fails there
    found, seen = {}, []
    for label, ending in VERSIONS.items():
        mapped = label == "natural"
        one = density(code, f"{name}_{ending}", parameters if mapped else parameters.dimension)
        seen.append(one(y))
        if not (np.isclose(seen[-1][0], seen[0][0], rtol=1e-12) and np.allclose(seen[-1][1], seen[0][1], rtol=1e-9)):
            raise RuntimeError(f"the versions of {name} differ")
        target, nothing = one.target(), (np.zeros(1), np.zeros((1, len(y))))
        found["gradient", label] = timer(
            lambda n, target=target, nothing=nothing: count_disagreements(target, y[None, :], *nothing, n), seconds)
        start = parameters.natural(y) if mapped else y
        chain = fw.Chain(one, start, path=fw.Jittered(8), seed=4, step_size=0.01)
        found["transition", label] = timer(lambda n, chain=chain: chain.advance(n), seconds)
    return found


VERSIONS = {"natural": "natural", "around": "wrapped", "rewritten": "by_hand"}


def main() -> None:
    """Print the table."""
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--quick", action="store_true", help="shorter repeats")
    repeats, seconds = (7, 0.02) if options.parse_args().quick else (25, 0.06)
    code, rows, before = library(), [], busy()
    for title, (name, parameters) in models().items():
        times = interleaved(works(code, name, parameters, seconds), repeats)
        for what in ("gradient", "transition"):
            natural = times[what, "natural"]
            row = [title, what, short_time(np.median(natural))]
            for label in ("around", "rewritten"):
                low, middle, high = np.quantile(natural / times[what, label], [0.25, 0.5, 0.75])
                row += [short_time(np.median(times[what, label])), f"{middle:.3f} ({low:.3f} to {high:.3f})"]
            rows.append(row)
    print(machine())
    print(f"Processor time, medians of {repeats} interleaved repeats, one thread; {before} before, {busy()} after.")
    print("Ratios: natural to by hand, median and middle half.\n")
    print(table(["model", "of", "natural", "around", "ratio", "rewritten", "ratio"], rows))


if __name__ == "__main__":
    main()
