/* The density's own curvature in whitened coordinates, H~ = S^T H S, along c and along w: by the caller's Hessian
 * product or by a difference of gradients. Only H~ c is kept as a vector; of H~ w the motions need inner products.
 * Without learned directions S is a diagonal and is applied inside the passes that need it (see kernels.h).
 */
#include <float.h>
#include <math.h>
#include <string.h>

#include "kernels.h"
#include "walk.h"

/* Length of a difference along a vector of squared length pp in the base metric: the point moves by sqrt(macheps), or
 * by the root of the coarsest spacing of its coordinates (in base units) where that is larger: the two balance
 * truncation against rounding, in any units. */
static double length(const fw_point *at, double pp)
{
    const double coarsest = at->coarsest > 1.0 ? (at->coarsest < 1e14 ? at->coarsest : 1e14) : 1.0;
    return sqrt(DBL_EPSILON * coarsest) / sqrt(pp);
}

/* walk->product <- H S p, or the gradient at x + h S p, for the whitened p of squared length pp > 0.
 * spread: walk->natural is S p already. */
static int ask(fw_walk *walk, const fw_point *at, const double *p, double pp, int spread, double *h)
{
    const fw_base *base = &walk->base;
    *h = fw_differs(walk) ? length(at, pp) : 0.0;
    if (fw_differs(walk) && base->k == 0) {
        fw_probe(walk->d, *h, at->x, base->r, p, walk->probe);
        return fw_evaluate_probe(walk);
    }
    if (!spread) fw_base_velocity(base, p, walk->natural);
    if (!fw_differs(walk)) return fw_multiply(walk, at->x);
    fw_copy(walk->d, at->x, walk->probe);
    fw_axpy(walk->d, *h, walk->natural, walk->probe);
    return fw_evaluate_probe(walk);
}

/* walk->product from what was asked to H~ p; with learned directions, where nothing is fused. */
static void whiten_product(fw_walk *walk, const fw_point *at, double h)
{
    if (fw_differs(walk)) fw_difference_over(walk->d, walk->product, at->g, 1.0 / h, walk->product);
    fw_base_gradient(&walk->base, walk->product, walk->product);
}

int fw_curve_gradient(fw_walk *walk, fw_point *p)
{
    const fw_base *base = &walk->base;
    const size_t d = walk->d;
    const int fused = base->k == 0, spread = fused && !fw_differs(walk);
    double h, sums[2];
    if (spread) {
        p->cc = fw_whiten_spread(d, base->r, p->g, p->c, walk->natural);
    } else if (fused) {
        p->cc = fw_whiten_square(d, base->r, p->g, p->c);
    } else {
        fw_base_gradient(base, p->g, p->c);
        p->cc = fw_dot(d, p->c, p->c);
    }
    if (!isfinite(p->cc)) return FW_GRADIENT_BAD;
    p->chc = p->hchc = 0.0;
    if (p->cc == 0.0) {
        memset(p->hc, 0, d * sizeof *p->hc);
        return FW_OK;
    }
    const int status = ask(walk, p, p->c, p->cc, spread, &h);
    if (status != FW_OK) return status;
    if (spread) {
        fw_whiten_product(d, base->r, walk->product, p->c, p->hc, sums);
    } else if (fused) {
        fw_whiten_difference(d, 1.0 / h, base->r, walk->product, p->g, p->hc, sums);
    } else {
        whiten_product(walk, p, h);
        fw_copy(d, walk->product, p->hc);
        sums[0] = fw_dot(d, p->c, p->hc);
        sums[1] = fw_dot(d, p->hc, p->hc);
    }
    p->chc = sums[0];
    p->hchc = sums[1];
    return isfinite(p->chc) && isfinite(p->hchc) ? FW_OK : FW_PRODUCT_BAD;
}

int fw_curve_velocity(fw_walk *walk, const fw_point *p, int spread, double *whw)
{
    const fw_base *base = &walk->base;
    double h;
    *whw = 0.0;
    if (!(p->ww > 0.0)) return isnan(p->ww) ? FW_PRODUCT_BAD : FW_OK;
    const int status = ask(walk, p, p->w, p->ww, spread, &h);
    if (status != FW_OK) return status;
    if (base->k > 0) {
        whiten_product(walk, p, h);
        *whw = fw_dot(walk->d, p->w, walk->product);
    } else if (fw_differs(walk)) {
        *whw = fw_difference_dot(walk->d, 1.0 / h, base->r, walk->product, p->g, p->w);
    } else {
        *whw = fw_product_dot(walk->d, base->r, walk->product, p->w);
    }
    return isfinite(*whw) ? FW_OK : FW_PRODUCT_BAD;
}

int fw_curve_velocity_all(fw_walk *walk, const fw_point *p, double sums[4])
{
    const fw_base *base = &walk->base;
    const size_t d = walk->d;
    double h;
    sums[0] = sums[1] = sums[2] = sums[3] = 0.0;
    if (!(p->ww > 0.0)) return isnan(p->ww) ? FW_PRODUCT_BAD : FW_OK;
    const int status = ask(walk, p, p->w, p->ww, 0, &h);
    if (status != FW_OK) return status;
    if (base->k > 0) {
        whiten_product(walk, p, h);
        sums[0] = fw_dot(d, walk->product, p->w);
        sums[1] = fw_dot(d, walk->product, p->c);
        sums[2] = fw_dot(d, walk->product, p->hc);
        sums[3] = fw_dot(d, p->w, p->hc);
    } else if (fw_differs(walk)) {
        fw_difference_sums(d, 1.0 / h, base->r, walk->product, p->g, p->w, p->hc, sums);
    } else {
        fw_product_sums(d, base->r, walk->product, p->w, p->c, p->hc, sums);
    }
    for (size_t i = 0; i < 4; ++i)
        if (!isfinite(sums[i])) return FW_PRODUCT_BAD;
    return FW_OK;
}
