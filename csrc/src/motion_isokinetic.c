/* Isokinetic motion: a velocity of constant length that gradients only turn (Ver Steeg & Galstyan 2021; Robnik,
 * Cohn-Gordon & Seljak 2025), as a leapfrog of exact turns and drifts, in whitened coordinates.
 *
 * The energy is minus the log density alone; what the velocity gives up comes back as the log-Jacobian of the turn,
 * which on a sphere in d dimensions is -(d - 1) log(stretch). Any length of the velocity gives the same motion at
 * another speed: paths begin at sqrt(d), the length that velocities of the other motions have, so that step sizes
 * compare. A turn needs two dimensions.
 */
#include <math.h>

#include "kernels.h"
#include "walk.h"

static const double most_turn = 4.0; /* beyond, the way back is lost to rounding: the error grows as 1e-16 e^(2 turn) */

static int complete(fw_walk *walk, fw_point *p)
{
    (void)walk;
    p->energy = -p->value;
    return isfinite(p->log_jacobian) && p->ww > 0.0 && isfinite(p->ww) ? FW_OK : FW_ENERGY_BAD;
}

/* The turn of w by half a step towards c (away from it for a step < 0): (w + *k c) / *stretch has the length of w, and
 * the log-Jacobian of the map is added. How far it turns depends on the speed and on c only, so it is the same from
 * both ends; near the antipode of c, 1 + cosine is taken from the vectors, as their product has lost its digits. */
static int turn(const fw_walk *walk, fw_point *p, double half_step, double speed, double *k, double *stretch)
{
    const double w = sqrt(p->ww), c = sqrt(p->cc), sign = half_step < 0.0 ? -1.0 : 1.0;
    const double others = (double)walk->d - 1.0;
    const double angle = fabs(half_step) * speed * c / others;
    *k = 0.0;
    *stretch = 1.0;
    if (c == 0.0) return FW_OK;
    if (!(angle <= most_turn)) return FW_STIFF;
    const double cosine = sign * p->wc / (w * c), half = sinh(0.5 * angle), sine = sinh(angle);
    double log_stretch, push;
    if (cosine < -0.5) {
        const double above = 0.5 * fw_square_of_sum(walk->d, 1.0 / w, p->w, sign / c, p->c); /* 1 + cosine */
        log_stretch = log1p(above * sine * exp(angle)) - angle;
        *stretch = exp(-angle) + above * sine;
        push = above * 2.0 * half * half - expm1(-angle);
    } else {
        const double rise = 2.0 * half * half + cosine * sine;
        log_stretch = log1p(rise);
        *stretch = 1.0 + rise;
        push = sine + cosine * 2.0 * half * half;
    }
    *k = sign * push * w / c;
    p->log_jacobian -= others * log_stretch;
    return FW_OK;
}

static int step(fw_walk *walk, fw_point *p, double step)
{
    const double speed = sqrt(p->ww);
    double k, stretch, sums[2];
    int status = turn(walk, p, 0.5 * step, speed, &k, &stretch);
    if (status != FW_OK) return status;
    /* w is left too long or too short by the stretch, which the drift and the second turn make good */
    fw_base_kick_drift(&walk->base, k, step / stretch, p);
    status = fw_walk_arrive(walk, p);
    if (status != FW_OK) return status;
    status = turn(walk, p, 0.5 * step, speed, &k, &stretch);
    if (status != FW_OK) return status;
    const double shrink = speed / (sqrt(p->ww) * stretch);
    fw_blend(walk->d, shrink, p->w, shrink * k, p->c, sums);
    p->ww = sums[0];
    p->wc = sums[1];
    return complete(walk, p);
}

/* Uniform on the sphere. */
static void refresh(const fw_walk *walk, fw_point *p)
{
    const double d = (double)walk->d, k = sqrt(d / p->ww);
    if (!isfinite(k)) return;
    fw_scale(walk->d, k, p->w);
    p->wc *= k;
    p->ww = d;
}

static double momentum(const fw_walk *walk, const fw_point *p)
{
    (void)walk;
    (void)p;
    return 0.0;
}

const fw_motion fw_isokinetic = {
    .name = "isokinetic",
    .source = "Robnik, Cohn-Gordon & Seljak 2025, arXiv 2503.01707; Ver Steeg & Galstyan 2021",
    .uses_products = 0,
    .least_dimension = 2,
    .refresh = refresh,
    .complete = complete,
    .step = step,
    .momentum = momentum,
};
