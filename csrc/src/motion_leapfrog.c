/* Leapfrog over the constant base metric: kick, drift, kick. Volume is kept, so the log-Jacobian is 0. */
#include <math.h>

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

static int step(fw_walk *walk, fw_point *p, double step)
{
    fw_base_leave(&walk->base, 0.5 * step, step, p);
    const int status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status != FW_OK) return status;
    fw_base_arrive_kick(&walk->base, 0.5 * step, p);
    return isfinite(p->cc) ? complete(walk, p) : FW_GRADIENT_BAD;
}

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
    .momentum = momentum,
};
