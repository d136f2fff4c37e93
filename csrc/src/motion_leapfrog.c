/* Leapfrog over the constant base metric: kick, drift, kick. Volume is kept, so the log-Jacobian is 0. */
#include <math.h>

#include "kernels.h"
#include "walk.h"

static void refresh(const fw_walk *walk, fw_point *p)
{
    (void)walk;
    (void)p; /* whitened velocities are standard normal */
}

static int complete(fw_walk *walk, fw_point *p)
{
    p->energy = -p->value + 0.5 * walk->base.log_det + 0.5 * p->ww;
    return isfinite(p->energy) ? FW_OK : FW_ENERGY_BAD;
}

/* Without learned directions c = r g is made again where it is needed, and neither read nor kept. */
static void leave(const fw_base *base, double step, fw_point *p)
{
    if (base->k == 0)
        fw_kick_drift_gradient(base->d, 0.5 * step, p->g, step, base->r, p->w, p->x);
    else
        fw_base_kick_drift(base, 0.5 * step, step, p);
}

static void arrive(const fw_base *base, double step, fw_point *p)
{
    double sums[3];
    if (base->k == 0) {
        fw_kick_gradient(base->d, 0.5 * step, base->r, p->g, p->w, sums);
        p->ww = sums[0];
        p->cc = sums[1];
        return;
    }
    fw_base_gradient(base, p->g, p->c);
    fw_axpy(base->d, 0.5 * step, p->c, p->w);
    fw_gram2(base->d, p->w, p->c, sums);
    p->ww = sums[0];
    p->cc = sums[2];
}

/* Between two steps of a row the next position waits in the place of the gradient, which is no longer needed: so x is
 * where the step ended until the next one begins, and a step that failed is told with its own position. */
static int step_in_row(fw_walk *walk, fw_point *p, double step, int first, int last)
{
    if (first) {
        leave(&walk->base, step, p);
    } else {
        double *next = p->g;
        p->g = p->x;
        p->x = next;
    }
    const int status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status != FW_OK) return status;
    if (last)
        arrive(&walk->base, step, p);
    else
        fw_base_link(&walk->base, 0.5 * step, step, p);
    return isfinite(p->cc) ? complete(walk, p) : FW_GRADIENT_BAD;
}

static int step(fw_walk *walk, fw_point *p, double step) { return step_in_row(walk, p, step, 1, 1); }

static double momentum(const fw_walk *walk, const fw_point *p)
{
    (void)walk;
    (void)p;
    return 0.0;
}

const fw_motion fw_leapfrog = {
    .name = "leapfrog",
    .source = "Duane, Kennedy, Pendleton & Roweth 1987, Phys. Lett. B 195; Neal 2011",
    .least_dimension = 1,
    .uses_products = 0,
    .refresh = refresh,
    .complete = complete,
    .step = step,
    .step_in_row = step_in_row,
    .momentum = momentum,
};
