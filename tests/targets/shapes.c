/* Densities given by a formula: normals, Student-t, Rosenbrock pairs, ring, funnel, winding ridge, rough well,
 * one-sided laws, and a normal that fails on request. Sources and exact marginals stand beside the Python
 * constructors. */
#include "targets.h"

#define HALF_LOG_TWO_PI 0.91893853320467274178

/* No context. */
DENSITY(standard_normal)
{
    UNUSED(context);
    for (size_t i = 0; i < d; i++)
        gradient[i] = -x[i];
    *value = -0.5 * dot(d, x, x) - HALF_LOG_TWO_PI * (double)d;
    return 0;
}

PRODUCT(standard_normal_product)
{
    UNUSED(x);
    UNUSED(context);
    for (size_t i = 0; i < d; i++)
        product[i] = -p[i];
    return 0;
}

/* [log constant, mean (d), 1 / variance (d)] */
DENSITY(independent_normal)
{
    const double *c = context, *mean = c + 1, *precision = mean + d;
    double lane[LANES] = {0.0};
    size_t i = 0;
    for (; i + LANES <= d; i += LANES)
        for (size_t j = 0; j < LANES; j++) {
            const double away = x[i + j] - mean[i + j], pull = -away * precision[i + j];
            gradient[i + j] = pull;
            lane[j] += away * pull;
        }
    double total = lane_sum(lane);
    for (; i < d; i++) {
        const double away = x[i] - mean[i], pull = -away * precision[i];
        gradient[i] = pull;
        total += away * pull;
    }
    *value = c[0] + 0.5 * total;
    return 0;
}

PRODUCT(independent_normal_product)
{
    UNUSED(x);
    const double *precision = (const double *)context + 1 + d;
    for (size_t i = 0; i < d; i++)
        product[i] = -p[i] * precision[i];
    return 0;
}

/* [log constant, mean (d), precision (d x d, symmetric)] */
DENSITY(dense_normal)
{
    const double *c = context, *mean = c + 1, *precision = mean + d;
    double total = 0.0;
    for (size_t i = 0; i < d; i++) {
        const double *row = precision + i * d;
        double lane[LANES] = {0.0};
        size_t k = 0;
        for (; k + LANES <= d; k += LANES)
            for (size_t j = 0; j < LANES; j++)
                lane[j] += row[k + j] * (x[k + j] - mean[k + j]);
        double pull = lane_sum(lane);
        for (; k < d; k++)
            pull += row[k] * (x[k] - mean[k]);
        gradient[i] = -pull;
        total += (x[i] - mean[i]) * pull;
    }
    *value = c[0] - 0.5 * total;
    return 0;
}

PRODUCT(dense_normal_product)
{
    UNUSED(x);
    const double *precision = (const double *)context + 1 + d;
    for (size_t i = 0; i < d; i++)
        product[i] = -dot(d, precision + i * d, p);
    return 0;
}

/* [log constant, w, c]: the precision is w (I - c 1 1^T) */
DENSITY(equicorrelated_normal)
{
    const double *c = context, w = c[1], shift = c[2] * sum(d, x);
    for (size_t i = 0; i < d; i++)
        gradient[i] = w * (shift - x[i]);
    *value = c[0] + 0.5 * dot(d, x, gradient);
    return 0;
}

PRODUCT(equicorrelated_normal_product)
{
    UNUSED(x);
    const double *c = context, w = c[1], shift = c[2] * sum(d, p);
    for (size_t i = 0; i < d; i++)
        product[i] = w * (shift - p[i]);
    return 0;
}

/* out = -W (I + E^T diag(excess) E) W a with W = diag(inverse scale); returns -a^T out. At most 64 directions. */
static double spiked_apply(size_t d, const double *a, double *out, const double *c)
{
    const size_t k = (size_t)c[1];
    const double *excess = c + 2, *inverse_scale = excess + k, *directions = inverse_scale + d;
    double along[64];
    for (size_t i = 0; i < d; i++)
        out[i] = a[i] * inverse_scale[i];
    double form = dot(d, out, out);
    for (size_t s = 0; s < k; s++) {
        const double t = dot(d, directions + s * d, out);
        along[s] = excess[s] * t;
        form += excess[s] * t * t;
    }
    for (size_t s = 0; s < k; s++)
        for (size_t i = 0; i < d; i++)
            out[i] += along[s] * directions[s * d + i];
    for (size_t i = 0; i < d; i++)
        out[i] *= -inverse_scale[i];
    return form;
}

/* [log constant, k, 1 / variance - 1 of each direction (k), 1 / scale (d), orthonormal directions (k x d)] */
DENSITY(spiked_normal)
{
    const double *c = context;
    *value = c[0] - 0.5 * spiked_apply(d, x, gradient, c);
    return 0;
}

PRODUCT(spiked_normal_product)
{
    UNUSED(x);
    (void)spiked_apply(d, p, product, context);
    return 0;
}

/* [log constant, nu, w, c]: the inverse of the scale matrix is w (I - c 1 1^T) */
DENSITY(student)
{
    const double *c = context, nu = c[1], w = c[2], shift = c[3] * sum(d, x);
    for (size_t i = 0; i < d; i++)
        gradient[i] = w * (x[i] - shift);
    const double form = dot(d, x, gradient), power = nu + (double)d, factor = -power / (nu + form);
    for (size_t i = 0; i < d; i++)
        gradient[i] *= factor;
    *value = c[0] - 0.5 * power * log1p(form / nu);
    return 0;
}

PRODUCT(student_product)
{
    const double *c = context, nu = c[1], w = c[2], shift = c[3] * sum(d, x), p_shift = c[3] * sum(d, p);
    double form = 0.0, cross = 0.0;
    for (size_t i = 0; i < d; i++) {
        const double y = w * (x[i] - shift);
        form += x[i] * y;
        cross += p[i] * y;
    }
    const double factor = (nu + (double)d) / (nu + form), along = 2.0 * cross / (nu + form);
    for (size_t i = 0; i < d; i++)
        product[i] = factor * w * (along * (x[i] - shift) - (p[i] - p_shift));
    return 0;
}

/* [log constant, a, b, mu]: independent pairs (x[2i], x[2i + 1]) */
DENSITY(rosenbrock)
{
    const double *c = context, a = c[1], b = c[2], mu = c[3];
    double valley = 0.0, wall = 0.0;
    for (size_t i = 0; i + 1 < d; i += 2) {
        const double u = x[i] - mu, r = x[i + 1] - x[i] * x[i];
        valley += u * u;
        wall += r * r;
        gradient[i] = -2.0 * a * u + 4.0 * b * x[i] * r;
        gradient[i + 1] = -2.0 * b * r;
    }
    *value = c[0] - a * valley - b * wall;
    return 0;
}

PRODUCT(rosenbrock_product)
{
    const double *c = context, a = c[1], b = c[2];
    for (size_t i = 0; i + 1 < d; i += 2) {
        const double r = x[i + 1] - x[i] * x[i];
        const double own = -2.0 * a + 4.0 * b * r - 8.0 * b * x[i] * x[i], cross = 4.0 * b * x[i];
        product[i] = own * p[i] + cross * p[i + 1];
        product[i + 1] = cross * p[i] - 2.0 * b * p[i + 1];
    }
    return 0;
}

/* [r0, 1 / s^2]. The gradient does not exist at the centre, which counts as outside the support. */
DENSITY(ring)
{
    const double *c = context, r = sqrt(dot(d, x, x));
    if (r == 0.0)
        return 1;
    const double away = r - c[0], factor = -away * c[1] / r;
    for (size_t i = 0; i < d; i++)
        gradient[i] = factor * x[i];
    *value = -0.5 * away * away * c[1];
    return 0;
}

PRODUCT(ring_product)
{
    const double *c = context, r = sqrt(dot(d, x, x));
    if (r == 0.0)
        return 1;
    const double across = (r - c[0]) / r, along = (1.0 - across) * dot(d, x, p) / (r * r);
    for (size_t i = 0; i < d; i++)
        product[i] = -c[1] * (across * p[i] + along * x[i]);
    return 0;
}

/* [log constant, 1 / sd^2]: x[0] is the axis v, the others are normal with variance exp(v) */
DENSITY(funnel)
{
    const double *c = context, v = x[0], shrink = exp(-v), others = (double)(d - 1);
    const double half = 0.5 * shrink * dot(d - 1, x + 1, x + 1);
    for (size_t i = 1; i < d; i++)
        gradient[i] = -shrink * x[i];
    gradient[0] = half - v * c[1] - 0.5 * others;
    *value = c[0] - 0.5 * v * v * c[1] - 0.5 * others * v - half;
    return 0;
}

PRODUCT(funnel_product)
{
    const double *c = context, shrink = exp(-x[0]);
    const double squares = dot(d - 1, x + 1, x + 1), cross = dot(d - 1, x + 1, p + 1);
    for (size_t i = 1; i < d; i++)
        product[i] = shrink * (x[i] * p[0] - p[i]);
    product[0] = shrink * (cross - 0.5 * squares * p[0]) - c[1] * p[0];
    return 0;
}

/* [log constant, w, 1 / s1^2, 1 / s2^2], d = 2 */
DENSITY(winding_ridge)
{
    UNUSED(d);
    const double *c = context, r = x[1] + sin(c[1] * x[0]);
    *value = c[0] - 0.5 * (x[0] * x[0] * c[2] + r * r * c[3]);
    gradient[0] = -x[0] * c[2] - c[1] * cos(c[1] * x[0]) * r * c[3];
    gradient[1] = -r * c[3];
    return 0;
}

PRODUCT(winding_ridge_product)
{
    UNUSED(d);
    const double *c = context, w = c[1], s = sin(w * x[0]), slope = w * cos(w * x[0]), r = x[1] + s;
    product[0] = (-c[2] + c[3] * (w * w * s * r - slope * slope)) * p[0] - c[3] * slope * p[1];
    product[1] = -c[3] * (slope * p[0] + p[1]);
    return 0;
}

/* [1 / scale^2, wave number] */
DENSITY(rough_well)
{
    const double *c = context;
    double ripples = 0.0;
    for (size_t i = 0; i < d; i++) {
        const double phase = c[1] * x[i];
        ripples += cos(phase);
        gradient[i] = c[1] * sin(phase) - c[0] * x[i];
    }
    *value = -0.5 * c[0] * dot(d, x, x) - ripples;
    return 0;
}

PRODUCT(rough_well_product)
{
    const double *c = context;
    for (size_t i = 0; i < d; i++)
        product[i] = (c[1] * c[1] * cos(c[1] * x[i]) - c[0]) * p[i];
    return 0;
}

/* [log constant, rate (d), 1 / variance (d)]: log density -rate x - x^2 / (2 variance) on x >= 0 */
DENSITY(one_sided)
{
    const double *c = context, *rate = c + 1, *precision = rate + d;
    for (size_t i = 0; i < d; i++)
        if (x[i] < 0.0)
            return 1;
    double total = 0.0;
    for (size_t i = 0; i < d; i++) {
        const double bend = precision[i] * x[i];
        gradient[i] = -rate[i] - bend;
        total += x[i] * (rate[i] + 0.5 * bend);
    }
    *value = c[0] - total;
    return 0;
}

PRODUCT(one_sided_product)
{
    const double *precision = (const double *)context + 1 + d;
    for (size_t i = 0; i < d; i++)
        if (x[i] < 0.0)
            return 1;
    for (size_t i = 0; i < d; i++)
        product[i] = -precision[i] * p[i];
    return 0;
}

/* [calls so far, call that fails (counted from 1), code to return, value to write when the code is 0]:
 * a standard normal whose n-th call misbehaves. Both callbacks count in the same place, so one chain at a time. */
DENSITY(failing_normal)
{
    double *c = context;
    c[0] += 1.0;
    const int fails = c[0] == c[1];
    if (fails && c[2] != 0.0)
        return (int)c[2];
    (void)standard_normal(d, x, value, gradient, NULL);
    if (fails)
        *value = c[3];
    return 0;
}

PRODUCT(failing_normal_product)
{
    double *c = context;
    c[0] += 1.0;
    const int fails = c[0] == c[1];
    if (fails && c[2] != 0.0)
        return (int)c[2];
    (void)standard_normal_product(d, x, p, product, NULL);
    if (fails)
        product[0] = c[3];
    return 0;
}
