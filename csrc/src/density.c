/* Checked calls of the caller's functions: counts, finiteness, "was it written at all". */
#include <float.h>
#include <math.h>
#include <string.h>

#include "walk.h"

/* A NaN that arithmetic does not produce: what is still there after the call was not written. */
static const uint64_t unwritten_bits = UINT64_C(0x7ff8f311a1c0ffee);

static double unwritten(void)
{
    double x;
    memcpy(&x, &unwritten_bits, sizeof x);
    return x;
}

static int is_unwritten(double x)
{
    uint64_t bits;
    memcpy(&bits, &x, sizeof bits);
    return bits == unwritten_bits;
}

void fw_walk_failed(fw_walk *walk, const double *x)
{
    memcpy(walk->failed_at, x, walk->d * sizeof *x);
}

/* For the codes that stop the call: a path that merely ends notes the position itself. */
static int fail(fw_walk *walk, const double *x, int status)
{
    fw_walk_failed(walk, x);
    return status;
}

int fw_evaluate(fw_walk *walk, const double *x, double *value, double *g)
{
    const size_t d = walk->d;
    if (walk->watch && *walk->watch) return FW_INTERRUPTED;
    double v = unwritten();
    g[0] = g[d - 1] = v;
    ++walk->gradients;
    const int answer = walk->target.density(d, x, &v, g, walk->target.density_context);
    if (answer < 0) return fail(walk, x, FW_CALLBACK_STOP);
    if (answer > 0) return FW_OUTSIDE;
    if (is_unwritten(v)) return fail(walk, x, FW_NOT_WRITTEN);
    if (isnan(v)) return FW_VALUE_NAN;
    if (v < -DBL_MAX) return FW_VALUE_ZERO;
    if (v > DBL_MAX) return fail(walk, x, FW_VALUE_INFINITE);
    if (is_unwritten(g[0]) || is_unwritten(g[d - 1])) return fail(walk, x, FW_NOT_WRITTEN);
    *value = v;
    return FW_OK;
}

int fw_evaluate_probe(fw_walk *walk)
{
    double value;
    const int status = fw_evaluate(walk, walk->probe, &value, walk->product);
    return status > 0 ? FW_PRODUCT_BAD : status;
}

int fw_multiply(fw_walk *walk, const double *x)
{
    const size_t d = walk->d;
    ++walk->products;
    walk->product[0] = walk->product[d - 1] = unwritten();
    const int answer = walk->target.product(d, x, walk->natural, walk->product, walk->target.product_context);
    if (answer < 0) return fail(walk, x, FW_CALLBACK_STOP);
    if (answer > 0) return FW_PRODUCT_BAD;
    if (is_unwritten(walk->product[0]) || is_unwritten(walk->product[d - 1])) return fail(walk, x, FW_NOT_WRITTEN);
    return FW_OK;
}
