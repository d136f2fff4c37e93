/* Lagrangian motion on the Monge metric, in whitened coordinates G = I + beta c c^T, L = 1 + beta c.c.
 *
 * Two explicit integrators: the semi-explicit one of Lan et al. (2015), and a splitting whose Christoffel part is
 * solved exactly. Both are reversible with a known Jacobian for any symmetric field in the place of the Hessian, so
 * besides exact Hessian products and gradient differences there is the surrogate field, -I in these coordinates,
 * under which a step costs one gradient and all coefficients come from w.w, w.c and c.c.
 */
#include <math.h>

#include "kernels.h"
#include "walk.h"

static const double pi = 3.14159265358979323846;

/* cosh(sqrt z) - 1 and sinh(sqrt z)/sqrt z, continued through z = 0 (cos and sin for z < 0): both entire in z. */
static void entire(double z, double *cosh_less_one, double *sinh_ratio)
{
    if (fabs(z) < 1e-3) { /* first term left out: z^5/10! and z^5/11!, below 1e-21 */
        *cosh_less_one = z / 2 * (1 + z / 12 * (1 + z / 30 * (1 + z / 56)));
        *sinh_ratio = 1 + z / 6 * (1 + z / 20 * (1 + z / 42 * (1 + z / 72)));
    } else if (z > 0.0) {
        const double y = sqrt(z), half = sinh(0.5 * y);
        *cosh_less_one = 2.0 * half * half;
        *sinh_ratio = sinh(y) / y;
    } else {
        const double y = sqrt(-z), half = sin(0.5 * y);
        *cosh_less_one = -2.0 * half * half;
        *sinh_ratio = sin(y) / y;
    }
}

/* Exact flow of dw/dt = -rate c (w.Hw) for the signed time t: w <- w - s c. A = w.Hw, B = w.Hc, C = c.Hc.
 * rate sqrt(disc) |t| is the same from both ends; past 4 the way back is lost to rounding (error 1e-16 e^8). */
static int christoffel(double rate, double t, double a, double b, double c, int surrogate, double *s, double *log_delta)
{
    double disc = b * b - a * c;
    if (surrogate && disc > 0.0) disc = 0.0; /* Cauchy-Schwarz */
    const double time = rate * t, z = time * time * disc;
    if (!(z <= 16.0)) return FW_STIFF;
    if (!(z > -pi * pi)) return FW_POLE;
    double cosh_less_one, sinh_ratio;
    entire(z, &cosh_less_one, &sinh_ratio);
    const double rise = cosh_less_one + b * time * sinh_ratio;
    if (!(1.0 + rise > 0.0)) return FW_POLE;
    *s = a * time * sinh_ratio / (1.0 + rise);
    *log_delta = log1p(rise);
    return FW_OK;
}

static double level(const fw_walk *walk, const fw_point *p) { return 1.0 + walk->beta * p->cc; }

static int finish(const fw_walk *walk, fw_point *p)
{
    p->energy = -p->value + 0.5 * walk->base.log_det - 0.5 * log1p(walk->beta * p->cc) +
                0.5 * (p->ww + walk->beta * p->wc * p->wc);
    return isfinite(p->energy) && isfinite(p->log_jacobian) ? FW_OK : FW_ENERGY_BAD;
}

/* ---- surrogate: everything is a multiple of c ------------------------------------------------------------------- */

/* The half step w <- w + *k c. leaving: first half of a step (Christoffel flow, then kick), else kick, then flow. */
static int half_surrogate(const fw_walk *walk, const fw_point *p, double step, int leaving, double *k, double *jacobian)
{
    const double l = level(walk, p), rate = walk->beta / l;
    const double kick = 0.5 * step * (1.0 + rate) / l;
    if (walk->scheme == FW_SEMI_EXPLICIT) {
        const double a = 0.5 * step * rate, before = 1.0 - a * p->wc;
        if (!(before > 0.0)) return FW_POLE;
        *k = kick + a * (p->ww + kick * p->wc) / before;
        const double after = 1.0 + a * (p->wc + *k * p->cc);
        if (!(after > 0.0)) return FW_POLE;
        *jacobian = log(after) - log(before);
        return FW_OK;
    }
    double ww = p->ww, wc = p->wc, s, log_delta;
    if (!leaving) {
        ww += kick * (2.0 * wc + kick * p->cc);
        wc += kick * p->cc;
    }
    const int status = christoffel(rate, 0.5 * step, -ww, -wc, -p->cc, 1, &s, &log_delta);
    *k = kick - s;
    *jacobian = -2.0 * log_delta;
    return status;
}

static int step_surrogate(fw_walk *walk, fw_point *p, double step)
{
    double k, jacobian, sums[2];
    int status = half_surrogate(walk, p, step, 1, &k, &jacobian);
    if (status != FW_OK) return status;
    p->log_jacobian += jacobian;
    fw_base_kick_drift(&walk->base, k, step, p);
    status = fw_walk_arrive(walk, p);
    if (status != FW_OK) return status;
    status = half_surrogate(walk, p, step, 0, &k, &jacobian);
    if (status != FW_OK) return status;
    p->log_jacobian += jacobian;
    fw_kick(walk->d, k, p->c, p->w, sums);
    p->ww = sums[0];
    p->wc = sums[1];
    return finish(walk, p);
}

/* ---- curvature of the density itself ------------------------------------------------------------------------------ */

static int curve_gradient(fw_walk *walk, fw_point *p)
{
    const int status = fw_curve(walk, p, p->c, p->cc, p->hc);
    if (status != FW_OK) return status;
    p->chc = fw_dot(walk->d, p->c, p->hc);
    return isfinite(p->chc) ? FW_OK : FW_PRODUCT_BAD;
}

static int curve_velocity(fw_walk *walk, fw_point *p)
{
    const int status = fw_curve(walk, p, p->w, p->ww, p->hw);
    if (status != FW_OK) return status;
    p->whw = fw_dot(walk->d, p->w, p->hw);
    p->whc = fw_dot(walk->d, p->w, p->hc);
    return isfinite(p->whw) ? FW_OK : FW_PRODUCT_BAD;
}

/* b = G^-1 grad phi = bc c + bh hc */
static void force(const fw_walk *walk, const fw_point *p, double *bc, double *bh)
{
    const double l = level(walk, p);
    *bh = walk->beta / l;
    *bc = -(1.0 + walk->beta * *bh * p->chc) / l;
}

static void sum_up(const fw_walk *walk, fw_point *p)
{
    double sums[3];
    fw_gram2(walk->d, p->w, p->c, sums);
    p->ww = sums[0];
    p->wc = sums[1];
    p->cc = sums[2];
}

/* First half of a split step; the drift follows. */
static int leave_split(fw_walk *walk, fw_point *p, double step)
{
    double bc, bh, s, log_delta;
    force(walk, p, &bc, &bh);
    const int status = christoffel(bh, 0.5 * step, p->whw, p->whc, p->chc, 0, &s, &log_delta);
    if (status != FW_OK) return status;
    p->log_jacobian -= 2.0 * log_delta;
    fw_kick2(walk->d, -s - 0.5 * step * bc, p->c, -0.5 * step * bh, p->hc, p->w);
    return FW_OK;
}

/* Second half. The H w that ends the step starts the next one: after the flow it is H w - s H c. */
static int arrive_split(fw_walk *walk, fw_point *p, double step)
{
    double bc, bh, s, log_delta;
    force(walk, p, &bc, &bh);
    fw_kick2(walk->d, -0.5 * step * bc, p->c, -0.5 * step * bh, p->hc, p->w);
    sum_up(walk, p);
    int status = curve_velocity(walk, p);
    if (status != FW_OK) return status;
    status = christoffel(bh, 0.5 * step, p->whw, p->whc, p->chc, 0, &s, &log_delta);
    if (status != FW_OK) return status;
    p->log_jacobian -= 2.0 * log_delta;
    fw_axpy(walk->d, -s, p->c, p->w);
    fw_axpy(walk->d, -s, p->hc, p->hw);
    p->whw = fw_dot(walk->d, p->w, p->hw);
    p->whc = fw_dot(walk->d, p->w, p->hc);
    sum_up(walk, p);
    return FW_OK;
}

/* Either half of a semi-explicit step: [I + a c (Hw)^T] w' = w - (step/2) b, a = step beta / 2L. */
static int half_semi_explicit(fw_walk *walk, fw_point *p, double step)
{
    double bc, bh;
    const int status = curve_velocity(walk, p);
    if (status != FW_OK) return status;
    force(walk, p, &bc, &bh);
    const double a = 0.5 * step * bh, before = 1.0 + a * p->whc;
    if (!(before > 0.0)) return FW_POLE;
    fw_kick2(walk->d, -0.5 * step * bc, p->c, -0.5 * step * bh, p->hc, p->w);
    fw_axpy(walk->d, -a * fw_dot(walk->d, p->hw, p->w) / before, p->c, p->w);
    const double after = 1.0 - a * fw_dot(walk->d, p->w, p->hc);
    if (!(after > 0.0)) return FW_POLE;
    p->log_jacobian += log(after) - log(before);
    sum_up(walk, p);
    return FW_OK;
}

static int step_curved(fw_walk *walk, fw_point *p, double step)
{
    int status = walk->scheme == FW_SPLIT ? leave_split(walk, p, step) : half_semi_explicit(walk, p, step);
    if (status != FW_OK) return status;
    fw_base_kick_drift(&walk->base, 0.0, step, p);
    status = fw_walk_arrive(walk, p);
    if (status != FW_OK) return status;
    status = curve_gradient(walk, p);
    if (status != FW_OK) return status;
    status = walk->scheme == FW_SPLIT ? arrive_split(walk, p, step) : half_semi_explicit(walk, p, step);
    if (status != FW_OK) return status;
    return finish(walk, p);
}

/* ---- the motion --------------------------------------------------------------------------------------------------- */

static int curved(const fw_walk *walk) { return walk->curvature != FW_SURROGATE && walk->beta > 0.0; }

/* z - k c (c.z) has covariance (I + beta c c^T)^-1; k written so that beta -> 0 loses no digits. */
static void refresh(const fw_walk *walk, fw_point *p)
{
    const double root = sqrt(level(walk, p));
    const double k = walk->beta / (root * (1.0 + root));
    fw_axpy(walk->d, -k * fw_dot(walk->d, p->c, p->w), p->c, p->w);
}

static int complete(fw_walk *walk, fw_point *p)
{
    if (curved(walk)) {
        int status = curve_gradient(walk, p);
        if (status == FW_OK && walk->scheme == FW_SPLIT) status = curve_velocity(walk, p);
        if (status != FW_OK) return status;
    }
    return finish(walk, p);
}

static int step_either(fw_walk *walk, fw_point *p, double step)
{
    return curved(walk) ? step_curved(walk, p, step) : step_surrogate(walk, p, step);
}

static double momentum(const fw_walk *walk, const fw_point *p) { return walk->beta * p->wc; }

const fw_motion fw_lagrangian = {
    .name = "lagrangian",
    .source = "Lan, Stathopoulos, Shahbaba & Girolami 2015, J. Comput. Graph. Stat. 24; Monge metric: Hartmann, "
              "Girolami & Klami 2022, AISTATS (from memory)",
    .uses_products = 1,
    .refresh = refresh,
    .complete = complete,
    .step = step_either,
    .momentum = momentum,
};
