#include <float.h>
#include <math.h>
#include <stdlib.h>

#include "kernels.h"

#define LANES 8

/* The body runs once for each element i, in lane j = i mod LANES. */
#define SWEEP(n, BODY)                                                                                                 \
    do {                                                                                                               \
        size_t base_ = 0;                                                                                              \
        for (; base_ + LANES <= (n); base_ += LANES)                                                                   \
            for (size_t j = 0; j < LANES; ++j) {                                                                       \
                const size_t i = base_ + j;                                                                            \
                BODY                                                                                                   \
            }                                                                                                          \
        for (size_t j = 0; base_ + j < (n); ++j) {                                                                     \
            const size_t i = base_ + j;                                                                                \
            BODY                                                                                                       \
        }                                                                                                              \
    } while (0)

static inline double fold(const double a[LANES])
{
    return ((a[0] + a[4]) + (a[2] + a[6])) + ((a[1] + a[5]) + (a[3] + a[7]));
}

FW_CLONES double fw_dot(size_t n, const double *restrict a, const double *restrict b)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += a[i] * b[i];);
    return fold(s);
}

FW_CLONES double fw_sum_square_ratio(size_t n, const double *restrict a, const double *restrict b)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += a[i] / b[i] * a[i];);
    return fold(s);
}

double fw_sum_log(size_t n, const double *restrict a)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += log(a[i]););
    return fold(s);
}

int fw_all_finite(size_t n, const double *restrict a)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += a[i] * 0.0;);
    return fold(s) == 0.0;
}

int fw_all_positive(size_t n, const double *restrict a)
{
    for (size_t i = 0; i < n; ++i)
        if (!(a[i] > 0.0 && a[i] <= DBL_MAX)) return 0;
    return 1;
}

FW_CLONES void fw_copy(size_t n, const double *restrict from, double *restrict to)
{
    for (size_t i = 0; i < n; ++i) to[i] = from[i];
}

FW_CLONES void fw_scale_by(size_t n, const double *a, const double *b, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = a[i] * b[i];
}

FW_CLONES void fw_divide_by(size_t n, const double *a, const double *b, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = a[i] / b[i];
}

FW_CLONES void fw_axpy(size_t n, double k, const double *restrict a, double *restrict y)
{
    for (size_t i = 0; i < n; ++i) y[i] += k * a[i];
}

FW_CLONES void fw_drift(size_t n, double k, const double *restrict r, const double *restrict w, double *restrict x)
{
    for (size_t i = 0; i < n; ++i) x[i] += k * (r[i] * w[i]);
}

FW_CLONES void fw_scale(size_t n, double k, double *y)
{
    for (size_t i = 0; i < n; ++i) y[i] *= k;
}

FW_CLONES void fw_difference(size_t n, const double *a, const double *b, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = a[i] - b[i];
}

FW_CLONES void fw_add_squares(size_t n, const double *restrict a, double *restrict sum)
{
    for (size_t i = 0; i < n; ++i) sum[i] += a[i] * a[i];
}

/* Blocks of columns stay in the first-level cache while every pair of rows passes over them. */
void fw_gram(size_t n, size_t rows, const double *const *vectors, double *out)
{
    const size_t block = 256;
    for (size_t i = 0; i < rows * rows; ++i) out[i] = 0.0;
    for (size_t at = 0; at < n; at += block) {
        const size_t width = n - at < block ? n - at : block;
        for (size_t a = 0; a < rows; ++a)
            for (size_t b = a; b < rows; ++b) out[a * rows + b] += fw_dot(width, vectors[a] + at, vectors[b] + at);
    }
    for (size_t a = 0; a < rows; ++a)
        for (size_t b = 0; b < a; ++b) out[a * rows + b] = out[b * rows + a];
}

FW_CLONES void fw_kick_drift(size_t n, double kick, const double *restrict c, double step, const double *restrict r,
                             double *restrict w, double *restrict x)
{
    for (size_t i = 0; i < n; ++i) {
        const double t = w[i] + kick * c[i];
        w[i] = t;
        x[i] += step * (r[i] * t);
    }
}

FW_CLONES void fw_whiten_kick(size_t n, double kick, const double *restrict r, const double *restrict g,
                              double *restrict c, double *restrict w, double sums[3])
{
    double ww[LANES] = {0}, wc[LANES] = {0}, cc[LANES] = {0};
    SWEEP(n, const double e = r[i] * g[i]; const double t = w[i] + kick * e; c[i] = e; w[i] = t; ww[j] += t * t;
          wc[j] += t * e; cc[j] += e * e;);
    sums[0] = fold(ww);
    sums[1] = fold(wc);
    sums[2] = fold(cc);
}

FW_CLONES void fw_whiten(size_t n, const double *restrict r, const double *restrict g, double *restrict c,
                         const double *restrict w, double sums[3])
{
    double ww[LANES] = {0}, wc[LANES] = {0}, cc[LANES] = {0};
    SWEEP(n, const double e = r[i] * g[i]; const double t = w[i]; c[i] = e; ww[j] += t * t; wc[j] += t * e;
          cc[j] += e * e;);
    sums[0] = fold(ww);
    sums[1] = fold(wc);
    sums[2] = fold(cc);
}

FW_CLONES void fw_kick(size_t n, double kick, const double *restrict c, double *restrict w, double sums[2])
{
    double ww[LANES] = {0}, wc[LANES] = {0};
    SWEEP(n, const double t = w[i] + kick * c[i]; w[i] = t; ww[j] += t * t; wc[j] += t * c[i];);
    sums[0] = fold(ww);
    sums[1] = fold(wc);
}

FW_CLONES void fw_gram2(size_t n, const double *restrict w, const double *restrict c, double sums[3])
{
    double ww[LANES] = {0}, wc[LANES] = {0}, cc[LANES] = {0};
    SWEEP(n, ww[j] += w[i] * w[i]; wc[j] += w[i] * c[i]; cc[j] += c[i] * c[i];);
    sums[0] = fold(ww);
    sums[1] = fold(wc);
    sums[2] = fold(cc);
}

FW_CLONES void fw_kick2(size_t n, double kc, const double *restrict c, double kh, const double *restrict h,
                        double *restrict w)
{
    for (size_t i = 0; i < n; ++i) w[i] += kc * c[i] + kh * h[i];
}

FW_CLONES double fw_ratio_dot(size_t n, const double *restrict a, const double *restrict b,
                              const double *restrict delta)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += a[i] * (b[i] / delta[i]););
    return fold(s);
}

FW_CLONES void fw_apply_out(size_t n, const double *delta, const double *v, double k, const double *u, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = delta[i] * v[i] + k * u[i];
}

FW_CLONES void fw_solve_out(size_t n, const double *delta, const double *p, double k, const double *u, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = p[i] / delta[i] - k * (u[i] / delta[i]);
}

FW_CLONES double fw_root_ratio_dot(size_t n, const double *restrict u, const double *restrict z,
                                   const double *restrict delta)
{
    double s[LANES] = {0};
    SWEEP(n, s[j] += u[i] / sqrt(delta[i]) * z[i];);
    return fold(s);
}

FW_CLONES void fw_velocity_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out)
{
    for (size_t i = 0; i < n; ++i) {
        const double root = sqrt(delta[i]);
        out[i] = (z[i] - k * (u[i] / root)) / root;
    }
}

FW_CLONES void fw_momentum_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out)
{
    for (size_t i = 0; i < n; ++i) {
        const double root = sqrt(delta[i]);
        out[i] = root * z[i] + k * u[i];
    }
}

FW_CLONES void fw_gather(size_t n, double count, const double *restrict a, double *restrict mean, double *restrict roots)
{
    const double counts = count > 1.0 ? 1.0 : 0.0;
    for (size_t i = 0; i < n; ++i) {
        const double away = a[i] - mean[i];
        roots[i] += counts * sqrt(fabs(away));
        mean[i] += away / count;
    }
}

FW_CLONES void fw_add_pair(size_t n, const double *restrict a, const double *restrict b, double *restrict out,
                           double sums[2])
{
    double ab[LANES] = {0}, aa[LANES] = {0};
    SWEEP(n, ab[j] += a[i] * b[i]; aa[j] += a[i] * a[i]; out[i] = a[i] + b[i];);
    sums[0] = fold(ab);
    sums[1] = fold(aa);
}

FW_CLONES void fw_seam(size_t n, const double *restrict fa, const double *restrict la, const double *restrict pa, const double *restrict ra,
                       const double *restrict fb, const double *restrict lb, const double *restrict pb, const double *restrict rb, double *restrict out,
                       double sums[6])
{
    double s0[LANES] = {0}, s1[LANES] = {0}, s2[LANES] = {0}, s3[LANES] = {0}, s4[LANES] = {0}, s5[LANES] = {0};
    SWEEP(n, const double rho = ra[i] + rb[i]; const double near_b = ra[i] + pb[i]; const double near_a = rb[i] + pa[i];
          s0[j] += fa[i] * rho; s1[j] += lb[i] * rho; s2[j] += fa[i] * near_b; s3[j] += fb[i] * near_b;
          s4[j] += la[i] * near_a; s5[j] += lb[i] * near_a; out[i] = rho;);
    sums[0] = fold(s0);
    sums[1] = fold(s1);
    sums[2] = fold(s2);
    sums[3] = fold(s3);
    sums[4] = fold(s4);
    sums[5] = fold(s5);
}

FW_CLONES void fw_seam_steps(size_t n, const double *restrict fa, const double *restrict la, const double *restrict ra,
                             const double *restrict edge, const double *restrict fb, const double *restrict lb,
                             const double *restrict rb, double *restrict out, double sums[6])
{
    double s0[LANES] = {0}, s1[LANES] = {0}, s2[LANES] = {0}, s3[LANES] = {0}, s4[LANES] = {0}, s5[LANES] = {0};
    SWEEP(n, const double inside = ra[i] + rb[i] + edge[i]; const double rho = inside + 0.5 * (fa[i] + lb[i]);
          const double near_b = ra[i] + edge[i] + 0.5 * (fa[i] + fb[i]);
          const double near_a = rb[i] + edge[i] + 0.5 * (la[i] + lb[i]); s0[j] += fa[i] * rho; s1[j] += lb[i] * rho;
          s2[j] += fa[i] * near_b; s3[j] += fb[i] * near_b; s4[j] += la[i] * near_a; s5[j] += lb[i] * near_a;
          out[i] = inside;);
    sums[0] = fold(s0);
    sums[1] = fold(s1);
    sums[2] = fold(s2);
    sums[3] = fold(s3);
    sums[4] = fold(s4);
    sums[5] = fold(s5);
}
