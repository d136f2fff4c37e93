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
    if (fabs(z) < 0.25) { /* first terms left out: z^8/16! and z^7/15!, below 2e-17 of the sums */
        const double zz = z * z;
        const double even = 1 / 2. + zz * (1 / 720. + zz * (1 / 3628800. + zz / 87178291200.));
        const double odd = 1 / 24. + zz * (1 / 40320. + zz / 479001600.);
        *cosh_less_one = z * (even + z * odd);
        const double even_s = zz * (1 / 120. + zz * (1 / 362880. + zz / 6227020800.));
        const double odd_s = 1 / 6. + zz * (1 / 5040. + zz / 39916800.);
        *sinh_ratio = 1.0 + (even_s + z * odd_s);
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

/* Exact flow of dw/dt = -rate c (w.Hw) for the signed time t: w <- w - s c, Jacobian (1 + rise)^-2. A = w.Hw,
 * B = w.Hc, C = c.Hc. rate sqrt(disc) |t| is the same from both ends; past 4 the way back is lost to rounding (error
 * 1e-16 e^8). */
static int christoffel(double rate, double t, double a, double b, double c, int surrogate, double *s, double *rise)
{
    double disc = b * b - a * c;
    if (surrogate && disc > 0.0) disc = 0.0; /* Cauchy-Schwarz */
    const double time = rate * t, z = time * time * disc;
    if (!(z <= 16.0)) return FW_STIFF;
    if (!(z > -pi * pi)) return FW_POLE;
    double cosh_less_one, sinh_ratio;
    entire(z, &cosh_less_one, &sinh_ratio);
    *rise = cosh_less_one + b * time * sinh_ratio;
    if (!(1.0 + *rise > 0.0)) return FW_POLE;
    *s = a * time * sinh_ratio / (1.0 + *rise);
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

/* The half step w <- w + *k c, its Jacobian (1 + *rise)^-2 or, semi-explicit, 1 + *rise.
 * leaving: first half of a step (Christoffel flow, then kick), else kick, then flow. */
static int half_surrogate(const fw_walk *walk, const fw_point *p, double step, int leaving, double *k, double *rise)
{
    const double l = level(walk, p), rate = walk->beta / l;
    const double kick = 0.5 * step * (1.0 + rate) / l;
    if (walk->scheme == FW_SEMI_EXPLICIT) {
        const double a = 0.5 * step * rate, before = 1.0 - a * p->wc;
        if (!(before > 0.0)) return FW_POLE;
        *k = kick + a * (p->ww + kick * p->wc) / before;
        const double after = 1.0 + a * (p->wc + *k * p->cc);
        *rise = (after - before) / before;
        return after > 0.0 ? FW_OK : FW_POLE;
    }
    double ww = p->ww, wc = p->wc, s;
    if (!leaving) {
        ww += kick * (2.0 * wc + kick * p->cc);
        wc += kick * p->cc;
    }
    const int status = christoffel(rate, 0.5 * step, -ww, -wc, -p->cc, 1, &s, rise);
    if (status == FW_OK) *k = kick - s;
    return status;
}

/* log of the product of two Jacobians as half_surrogate gives them: one logarithm a step */
static double log_jacobian(const fw_walk *walk, double rise, double other)
{
    return (walk->scheme == FW_SEMI_EXPLICIT ? 1.0 : -2.0) * log1p(rise + other + rise * other);
}

/* Between two steps of a row the last kick is owed, as only its sums are needed, and c is made again where it is used. */
static int step_surrogate(fw_walk *walk, fw_point *p, double step, int first, int last)
{
    const size_t d = walk->d;
    const double *r = walk->base.r;
    double k, leaving, arriving, sums[3];
    int status = half_surrogate(walk, p, step, 1, &k, &leaving);
    if (status != FW_OK) return status;
    if (first)
        fw_base_kick_drift(&walk->base, k, step, p);
    else
        fw_kick_twice_drift(d, p->owed, k, p->g, step, r, p->w, p->x);
    status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status != FW_OK) return status;
    if (last) {
        fw_base_arrive(&walk->base, p);
    } else {
        fw_whitened_sums(d, r, p->g, p->w, sums);
        p->ww = sums[0];
        p->wc = sums[1];
        p->cc = sums[2];
    }
    if (!isfinite(p->cc)) return FW_GRADIENT_BAD;
    status = half_surrogate(walk, p, step, 0, &k, &arriving);
    if (status != FW_OK) return status;
    p->log_jacobian += log_jacobian(walk, leaving, arriving);
    if (last)
        fw_kick(d, k, p->c, p->w, sums);
    else
        fw_kicked_sums(d, k, r, p->g, p->w, sums);
    p->owed = last ? 0.0 : k;
    p->ww = sums[0];
    p->wc = sums[1];
    return finish(walk, p);
}

/* ---- curvature of the density itself ------------------------------------------------------------------------------ */

/* b = G^-1 grad phi = bc c + bh hc */
static void force(const fw_walk *walk, const fw_point *p, double *bc, double *bh)
{
    const double l = level(walk, p);
    *bh = walk->beta / l;
    *bc = -(1.0 + walk->beta * *bh * p->chc) / l;
}

/* First half of a split step, and the drift. */
static int leave_split(fw_walk *walk, fw_point *p, double step)
{
    double bc, bh, s, rise;
    force(walk, p, &bc, &bh);
    const int status = christoffel(bh, 0.5 * step, p->whw, p->whc, p->chc, 0, &s, &rise);
    if (status != FW_OK) return status;
    p->log_jacobian -= 2.0 * log1p(rise);
    fw_base_kick2_drift(&walk->base, -s - 0.5 * step * bc, -0.5 * step * bh, step, fw_differs(walk), p);
    return FW_OK;
}

/* Second half. What the next step needs of H w follows from H w here: after the flow it is H w - s hc. */
static int arrive_split(fw_walk *walk, fw_point *p, double step)
{
    const size_t d = walk->d;
    const int spread = walk->base.k == 0 && walk->curvature == FW_PRODUCT;
    double bc, bh, s, rise, whw, sums[3];
    force(walk, p, &bc, &bh);
    const double kc = -0.5 * step * bc, kh = -0.5 * step * bh;
    if (spread)
        fw_kick2_spread(d, kc, p->c, kh, p->hc, walk->base.r, p->w, walk->natural, sums);
    else
        fw_kick2(d, kc, p->c, kh, p->hc, p->w, sums);
    p->ww = sums[0];
    const double whc = sums[spread ? 1 : 2];
    int status = fw_curve_velocity(walk, p, spread, &whw);
    if (status != FW_OK) return status;
    status = christoffel(bh, 0.5 * step, whw, whc, p->chc, 0, &s, &rise);
    if (status != FW_OK) return status;
    p->log_jacobian -= 2.0 * log1p(rise);
    fw_kick(d, -s, p->c, p->w, sums);
    p->ww = sums[0];
    p->wc = sums[1];
    p->whw = whw - 2.0 * s * whc + s * s * p->chc;
    p->whc = whc - s * p->chc;
    return FW_OK;
}

/* Either half of a semi-explicit step, [I + a c (Hw)^T] w' = w - (step/2) b with a = step beta / 2L, so that
 * w' = w + *kc c + *kh hc. */
static int half_semi_explicit(fw_walk *walk, fw_point *p, double step, double *kc, double *kh)
{
    double bc, bh, sums[4];
    const int status = fw_curve_velocity_all(walk, p, sums);
    if (status != FW_OK) return status;
    force(walk, p, &bc, &bh);
    const double whw = sums[0], whc = sums[3], a = 0.5 * step * bh, before = 1.0 + a * whc;
    if (!(before > 0.0)) return FW_POLE;
    *kc = -0.5 * step * bc;
    *kh = -0.5 * step * bh;
    *kc -= a * (whw + *kc * sums[1] + *kh * sums[2]) / before;
    const double after = 1.0 - a * (whc + *kc * p->chc + *kh * p->hchc);
    if (!(after > 0.0)) return FW_POLE;
    p->log_jacobian += log(after / before);
    return FW_OK;
}

static int leave_semi_explicit(fw_walk *walk, fw_point *p, double step)
{
    double kc, kh;
    const int status = half_semi_explicit(walk, p, step, &kc, &kh);
    if (status == FW_OK) fw_base_kick2_drift(&walk->base, kc, kh, step, fw_differs(walk), p);
    return status;
}

static int arrive_semi_explicit(fw_walk *walk, fw_point *p, double step)
{
    double kc, kh, sums[3];
    const int status = half_semi_explicit(walk, p, step, &kc, &kh);
    if (status != FW_OK) return status;
    fw_kick2(walk->d, kc, p->c, kh, p->hc, p->w, sums);
    p->ww = sums[0];
    p->wc = sums[1];
    return FW_OK;
}

static int step_curved(fw_walk *walk, fw_point *p, double step)
{
    const int split = walk->scheme == FW_SPLIT;
    int status = split ? leave_split(walk, p, step) : leave_semi_explicit(walk, p, step);
    if (status == FW_OK) status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status == FW_OK) status = fw_curve_gradient(walk, p);
    if (status == FW_OK) status = split ? arrive_split(walk, p, step) : arrive_semi_explicit(walk, p, step);
    return status == FW_OK ? finish(walk, p) : status;
}

/* ---- the motion --------------------------------------------------------------------------------------------------- */

static int curved(const fw_walk *walk) { return walk->curvature != FW_SURROGATE && walk->beta > 0.0; }

/* z - k c (c.z) has covariance (I + beta c c^T)^-1; k written so that beta -> 0 loses no digits. */
static void refresh(const fw_walk *walk, fw_point *p)
{
    const double root = sqrt(level(walk, p));
    const double k = walk->beta / (root * (1.0 + root));
    double sums[2];
    fw_kick(walk->d, -k * p->wc, p->c, p->w, sums);
    p->ww = sums[0];
    p->wc = sums[1];
}

static int complete(fw_walk *walk, fw_point *p)
{
    if (curved(walk)) {
        if (fw_differs(walk)) p->coarsest = fw_coarsest(walk->d, walk->base.r, p->x);
        int status = fw_curve_gradient(walk, p);
        if (status == FW_OK && walk->scheme == FW_SPLIT) {
            p->whc = fw_dot(walk->d, p->w, p->hc);
            status = fw_curve_velocity(walk, p, 0, &p->whw);
        }
        if (status != FW_OK) return status;
    }
    return finish(walk, p);
}

static int step_either(fw_walk *walk, fw_point *p, double step)
{
    return curved(walk) ? step_curved(walk, p, step) : step_surrogate(walk, p, step, 1, 1);
}

static int step_in_row(fw_walk *walk, fw_point *p, double step, int first, int last)
{
    if (curved(walk) || walk->base.k > 0) return step_either(walk, p, step);
    return step_surrogate(walk, p, step, first, last);
}

static double momentum(const fw_walk *walk, const fw_point *p) { return walk->beta * p->wc; }

const fw_motion fw_lagrangian = {
    .name = "lagrangian",
    .source = "Lan, Stathopoulos, Shahbaba & Girolami 2015, J. Comput. Graph. Stat. 24; Monge metric: Hartmann, "
              "Girolami & Klami 2022, AISTATS (from memory)",
    .least_dimension = 1,
    .uses_products = 1,
    .refresh = refresh,
    .complete = complete,
    .step = step_either,
    .step_in_row = step_in_row,
    .momentum = momentum,
};
