/* Checked calls of the caller's functions: counts, finiteness, "was it written at all". */
#include <float.h>
#include <math.h>
#include <string.h>

#include "kernels.h"
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

/* Forward difference of the gradient along the natural vector walk->natural, whose length in the base metric is
 * sqrt(pp). In that metric the point moves by eta = sqrt(macheps), or by the root of the coarsest spacing of its
 * coordinates (in base units) where that is larger: the two balance truncation against rounding, in any units. */
static int difference(fw_walk *walk, const fw_point *at, double pp)
{
    const size_t d = walk->d;
    double coarsest = 0.0;
    for (size_t i = 0; i < d; ++i) {
        const double spacing = fabs(at->x[i]) / walk->base.r[i];
        if (spacing > coarsest) coarsest = spacing;
    }
    const double eta = sqrt(DBL_EPSILON * (coarsest > 1.0 ? (coarsest < 1e14 ? coarsest : 1e14) : 1.0));
    const double h = eta / sqrt(pp);
    fw_copy(d, at->x, walk->probe);
    fw_axpy(d, h, walk->natural, walk->probe);
    double value;
    const int status = fw_evaluate(walk, walk->probe, &value, walk->product);
    if (status < 0) return status;
    if (status > 0) return FW_PRODUCT_BAD;
    for (size_t i = 0; i < d; ++i) walk->product[i] = (walk->product[i] - at->g[i]) / h;
    return FW_OK;
}

int fw_curve(fw_walk *walk, const fw_point *at, const double *p, double pp, double *hp)
{
    const size_t d = walk->d;
    if (!(pp > 0.0)) {
        memset(hp, 0, d * sizeof *hp);
        return isnan(pp) ? FW_PRODUCT_BAD : FW_OK;
    }
    fw_base_velocity(&walk->base, p, walk->natural);
    if (walk->curvature == FW_DIFFERENCE) {
        const int status = difference(walk, at, pp);
        if (status != FW_OK) return status;
    } else {
        ++walk->products;
        walk->product[0] = walk->product[d - 1] = unwritten();
        const int answer =
            walk->target.product(d, at->x, walk->natural, walk->product, walk->target.product_context);
        if (answer < 0) return fail(walk, at->x, FW_CALLBACK_STOP);
        if (answer > 0) return FW_PRODUCT_BAD;
        if (is_unwritten(walk->product[0]) || is_unwritten(walk->product[d - 1]))
            return fail(walk, at->x, FW_NOT_WRITTEN);
    }
    fw_base_gradient(&walk->base, walk->product, hp);
    return FW_OK;
}
