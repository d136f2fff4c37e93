/* The learned, constant part of every metric: a diagonal and a few directions (see walk.h for S and A). */
#include <math.h>
#include <string.h>

#include "kernels.h"
#include "walk.h"

void fw_base_set(fw_base *base, const double *scale, size_t k, const double *directions, const double *lambda)
{
    const size_t d = base->d;
    for (size_t i = 0; i < d; ++i) base->r[i] = sqrt(scale[i]);
    base->k = k;
    base->log_det = fw_sum_log(d, scale);
    for (size_t j = 0; j < k; ++j) {
        base->lambda[j] = lambda[j];
        base->log_det += log(lambda[j]);
    }
    if (k > 0) memmove(base->directions, directions, k * d * sizeof *directions);
}

/* y <- (I + E (f - 1) E^T) y; the columns are orthonormal, so each acts by itself. */
static void stretch(const fw_base *base, const double *factor, double *y)
{
    double part[FW_MAX_DIRECTIONS];
    for (size_t j = 0; j < base->k; ++j)
        part[j] = (factor[j] - 1.0) * fw_dot(base->d, base->directions + j * base->d, y);
    for (size_t j = 0; j < base->k; ++j) fw_axpy(base->d, part[j], base->directions + j * base->d, y);
}

void fw_base_spread(const fw_base *base, double *w)
{
    double factor[FW_MAX_DIRECTIONS];
    for (size_t j = 0; j < base->k; ++j) factor[j] = sqrt(base->lambda[j]);
    stretch(base, factor, w);
}

void fw_base_unspread(const fw_base *base, double *w)
{
    double factor[FW_MAX_DIRECTIONS];
    for (size_t j = 0; j < base->k; ++j) factor[j] = 1.0 / sqrt(base->lambda[j]);
    stretch(base, factor, w);
}

void fw_base_velocity(const fw_base *base, const double *w, double *v)
{
    if (base->k == 0) {
        fw_scale_by(base->d, base->r, w, v);
        return;
    }
    if (v != w) fw_copy(base->d, w, v);
    fw_base_spread(base, v);
    fw_scale_by(base->d, base->r, v, v);
}

void fw_base_whiten_velocity(const fw_base *base, const double *v, double *w)
{
    fw_divide_by(base->d, v, base->r, w);
    if (base->k > 0) fw_base_unspread(base, w);
}

void fw_base_gradient(const fw_base *base, const double *g, double *c)
{
    fw_scale_by(base->d, base->r, g, c);
    if (base->k > 0) fw_base_spread(base, c);
}

/* x += step S w, what the diagonal does already done */
static void drift_along_directions(const fw_base *base, double step, const double *w, double *x)
{
    const size_t d = base->d;
    for (size_t j = 0; j < base->k; ++j) {
        const double *e = base->directions + j * d;
        const double part = (sqrt(base->lambda[j]) - 1.0) * fw_dot(d, e, w);
        fw_drift(d, step * part, base->r, e, x);
    }
}

void fw_base_kick_drift(const fw_base *base, double kick, double step, fw_point *p)
{
    fw_kick_drift(base->d, kick, p->c, step, base->r, p->w, p->x);
    drift_along_directions(base, step, p->w, p->x);
}

void fw_base_kick2_drift(const fw_base *base, double kc, double kh, double step, int spacing, fw_point *p)
{
    double sums[2];
    if (spacing && base->k == 0) {
        fw_kick2_drift_coarsest(base->d, kc, p->c, kh, p->hc, step, base->r, p->w, p->x, sums);
        p->ww = sums[0];
        p->coarsest = sums[1];
        return;
    }
    p->ww = fw_kick2_drift(base->d, kc, p->c, kh, p->hc, step, base->r, p->w, p->x);
    drift_along_directions(base, step, p->w, p->x);
    if (spacing) p->coarsest = fw_coarsest(base->d, base->r, p->x);
}

void fw_base_link(const fw_base *base, double kick, double step, fw_point *p)
{
    double sums[2];
    if (base->k == 0) {
        fw_link_gradient(base->d, kick, step, base->r, p->w, p->x, p->g, sums);
    } else {
        fw_base_gradient(base, p->g, p->c);
        fw_link(base->d, kick, p->c, step, base->r, p->w, p->x, p->g, sums);
        drift_along_directions(base, step, p->w, p->g);
    }
    p->ww = sums[0];
    p->cc = sums[1];
}

void fw_base_arrive(const fw_base *base, fw_point *p)
{
    double sums[3];
    if (base->k == 0) {
        fw_whiten(base->d, base->r, p->g, p->c, p->w, sums);
    } else {
        fw_base_gradient(base, p->g, p->c);
        fw_gram2(base->d, p->w, p->c, sums);
    }
    p->ww = sums[0];
    p->wc = sums[1];
    p->cc = sums[2];
}
