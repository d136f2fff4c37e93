/* The elementwise maps: exponentials one by one, then passes that the compiler turns into vector code. */
#include <float.h>
#include <math.h>
#include <stdint.h>

#include "kernels.h"
#include "maps.h"

#define LANES 8

static double fold(const double a[LANES])
{
    return ((a[0] + a[4]) + (a[2] + a[6])) + ((a[1] + a[5]) + (a[3] + a[7]));
}

/* Sum in fixed lanes, element i in lane i mod LANES, as in kernels.c. */
FW_CLONES static double sum_of(size_t n, const double *restrict a)
{
    double sums[LANES] = {0};
    size_t i = 0;
    for (; i + LANES <= n; i += LANES)
        for (size_t j = 0; j < LANES; ++j) sums[j] += a[i + j];
    for (size_t j = 0; i + j < n; ++j) sums[j] += a[i + j];
    return fold(sums);
}

/* x = bound + sign e, slope = sign e, e in slope on entry. Is some x on its bound, or not finite? The answer gathers
 * in an integer, so that the compiler may take several elements at once. */
FW_CLONES static int finish_one_sided(size_t n, double sign, const double *restrict bound, double *restrict x,
                                      double *restrict slope)
{
    int64_t rare = 0;
    for (size_t i = 0; i < n; ++i) {
        const double e = sign * slope[i], t = bound[i] + e;
        slope[i] = e;
        x[i] = t;
        rare |= (int64_t)(t == bound[i]) | (int64_t)(fabs(t) > DBL_MAX);
    }
    return rare != 0;
}

double fw_one_sided(size_t n, double sign, const double *y, const double *bound, double *x, double *slope)
{
    for (size_t i = 0; i < n; ++i) slope[i] = exp(y[i]);
    if (finish_one_sided(n, sign, bound, x, slope))
        for (size_t i = 0; i < n; ++i) {
            if (x[i] == bound[i]) x[i] = nextafter(x[i], sign * INFINITY);
            else if (fabs(x[i]) > DBL_MAX) x[i] = sign * DBL_MAX;
        }
    return sum_of(n, y);
}

/* From the nearer bound, so that a value keeps its digits beside either of them. e = exp(-|y|) in slope on entry,
 * 1 + e in x. */
FW_CLONES static int finish_between(size_t n, const double *restrict y, const double *restrict low,
                                    const double *restrict high, const double *restrict width,
                                    const double *restrict twice, double *restrict x, double *restrict slope,
                                    double *restrict turn)
{
    int64_t rare = 0;
    for (size_t i = 0; i < n; ++i) {
        const double e = slope[i], whole = x[i], share = e / whole, off = twice[i] * (width[i] * share);
        const double value = y[i] < 0.0 ? low[i] + off : high[i] - off;
        x[i] = value;
        slope[i] = twice[i] * (width[i] * (share / whole));
        turn[i] = (y[i] < 0.0 ? 1.0 - e : e - 1.0) / whole;
        rare |= (int64_t)(value <= low[i]) | (int64_t)(value >= high[i]);
    }
    return rare != 0;
}

/* The logarithm of a product of numbers between 1 and 2: of so many at a time that the product stays finite. */
static double log_of_product(size_t n, const double *a)
{
    double total = 0.0;
    for (size_t begin = 0; begin < n; begin += 1000) {
        const size_t end = n - begin < 1000 ? n : begin + 1000;
        double product = 1.0;
        for (size_t i = begin; i < end; ++i) product *= a[i];
        total += log(product);
    }
    return total;
}

double fw_between(size_t n, const double *y, const double *low, const double *high, const double *width,
                  const double *twice, double *x, double *slope, double *turn)
{
    for (size_t i = 0; i < n; ++i) {
        const double size = fabs(y[i]);
        turn[i] = size;
        slope[i] = exp(-size);
        x[i] = 1.0 + slope[i];
    }
    const double log_jacobian = -sum_of(n, turn) - 2.0 * log_of_product(n, x);
    if (finish_between(n, y, low, high, width, twice, x, slope, turn))
        for (size_t i = 0; i < n; ++i) {
            if (!(x[i] > low[i])) x[i] = nextafter(low[i], INFINITY);
            if (!(x[i] < high[i])) x[i] = nextafter(high[i], -INFINITY);
        }
    return log_jacobian;
}

/* log((x - low) / (high - x)); through log1p in the middle, where the logarithm of a ratio near 1 loses digits, and as
 * a difference of logarithms only where the ratio would leave the range of doubles. */
double fw_between_inverse(double x, double low, double high, double twice)
{
    if (!(x > low && x < high)) return NAN;
    const double u = twice > 1.0 ? 0.5 * x - 0.5 * low : x - low;
    const double v = twice > 1.0 ? 0.5 * high - 0.5 * x : high - x;
    if (u > 0.5 * v && u < 2.0 * v) return log1p((u - v) / v);
    const double ratio = u / v;
    return ratio > 1e-290 && ratio < 1e290 ? log(ratio) : log(u) - log(v);
}

FW_CLONES void fw_pull_with_turn(size_t n, const double *restrict g, const double *restrict slope,
                                 const double *restrict turn, double *restrict out)
{
    for (size_t i = 0; i < n; ++i) out[i] = g[i] * slope[i] + turn[i];
}
