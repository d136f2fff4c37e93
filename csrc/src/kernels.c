#include <float.h>
#include <math.h>
#include <stdlib.h>

#include "kernels.h"

#define LANES 8

static double fold(const double s[LANES])
{
    return ((s[0] + s[4]) + (s[2] + s[6])) + ((s[1] + s[5]) + (s[3] + s[7]));
}

static double largest(const double most[LANES])
{
    double x = most[0];
    for (size_t j = 1; j < LANES; ++j) x = most[j] > x ? most[j] : x;
    return x;
}

/* A kernel is written once: SWEEP runs its body for every half group of four elements, GET and PUT move one, SUM, ADD
 * and FOLD keep a sum in eight lanes. Where the compiler has vectors a half group is one vector (an incomplete one is
 * padded with zeros); elsewhere the body runs element by element in the same order of operations. */
#if defined(__GNUC__) && !defined(FW_NO_VECTORS)
#pragma GCC diagnostic ignored "-Wpsabi" /* vectors cross only inlined calls */
typedef double group __attribute__((vector_size(32), aligned(8), may_alias));

/* m is a constant where these are inlined: each becomes one or two moves. */
__attribute__((always_inline)) static inline group get(const double *a, size_t m)
{
    switch (m) {
    case 1: return (group){a[0], 0.0, 0.0, 0.0};
    case 2: return (group){a[0], a[1], 0.0, 0.0};
    case 3: return (group){a[0], a[1], a[2], 0.0};
    default: return *(const group *)a;
    }
}

__attribute__((always_inline)) static inline void put(double *a, group x, size_t m)
{
    switch (m) {
    case 3: a[2] = x[2]; /* fall through */
    case 2: a[1] = x[1]; /* fall through */
    case 1: a[0] = x[0]; break;
    default: *(group *)a = x;
    }
}

#define HALF(at, half, count, BODY)                                                                                    \
    {                                                                                                                  \
        const size_t i = (at);                                                                                         \
        enum { m_ = (count), half_ = (half) };                                                                         \
        BODY                                                                                                           \
    }
#define REST(at, half, count, BODY)                                                                                    \
    switch (count) {                                                                                                   \
    case 1: HALF(at, half, 1, BODY) break;                                                                             \
    case 2: HALF(at, half, 2, BODY) break;                                                                             \
    case 3: HALF(at, half, 3, BODY) break;                                                                             \
    default: break;                                                                                                    \
    }
#define SWEEP(n, BODY)                                                                                                 \
    do {                                                                                                               \
        size_t at_ = 0;                                                                                                \
        for (; at_ + LANES <= (n); at_ += LANES) {                                                                     \
            HALF(at_, 0, 4, BODY)                                                                                      \
            HALF(at_ + 4, 1, 4, BODY)                                                                                  \
        }                                                                                                              \
        if (at_ + 4 <= (n)) {                                                                                          \
            HALF(at_, 0, 4, BODY)                                                                                      \
            REST(at_ + 4, 1, (n) - (at_ + 4), BODY)                                                                    \
        } else {                                                                                                       \
            REST(at_, 0, (n)-at_, BODY)                                                                                \
        }                                                                                                              \
    } while (0)
#define GET(a) get((a) + i, m_)
#define PUT(a, x) put((a) + i, x, m_)
#define SUM(s) group s[2] = {{0}}
#define ADD(s, x) (s)[half_] += (x)
#define FOLD(s) fold_group((s)[0] + (s)[1])
#define ROOT(x) root_group(x)

__attribute__((always_inline)) static inline double fold_group(group x) { return (x[0] + x[2]) + (x[1] + x[3]); }

/* sqrt |x| */
__attribute__((always_inline)) static inline group root_group(group x)
{
    for (int j = 0; j < 4; ++j) x[j] = sqrt(fabs(x[j]));
    return x;
}
#else
typedef double group;

#define SWEEP(n, BODY)                                                                                                 \
    do {                                                                                                               \
        for (size_t i = 0; i < (n); ++i) {                                                                             \
            const size_t j = i % LANES;                                                                                \
            (void)j;                                                                                                   \
            BODY                                                                                                       \
        }                                                                                                              \
    } while (0)
#define GET(a) (a)[i]
#define PUT(a, x) (a)[i] = (x)
#define SUM(s) double s[LANES] = {0}
#define ADD(s, x) (s)[j] += (x)
#define FOLD(s) fold(s)
#define ROOT(x) sqrt(fabs(x))
#endif

FW_CLONES double fw_dot(size_t n, const double *restrict a, const double *restrict b)
{
    SUM(s);
    SWEEP(n, ADD(s, GET(a) * GET(b)););
    return FOLD(s);
}

FW_CLONES double fw_sum_square_ratio(size_t n, const double *restrict a, const double *restrict b)
{
    /* a group beyond the end is 0/0: the last elements go by themselves, in their lanes */
    double s[LANES] = {0};
    for (size_t i = 0; i < n; ++i) s[i % LANES] += a[i] / b[i] * a[i];
    return fold(s);
}

double fw_sum_log(size_t n, const double *restrict a)
{
    double s[LANES] = {0};
    for (size_t i = 0; i < n; ++i) s[i % LANES] += log(a[i]);
    return fold(s);
}

int fw_all_finite(size_t n, const double *restrict a)
{
    SUM(s);
    SWEEP(n, ADD(s, GET(a) * 0.0););
    return FOLD(s) == 0.0;
}

int fw_all_positive(size_t n, const double *restrict a)
{
    for (size_t i = 0; i < n; ++i)
        if (!(a[i] > 0.0 && a[i] <= DBL_MAX)) return 0;
    return 1;
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
    SWEEP(n, PUT(x, GET(x) + k * (GET(r) * GET(w))););
}

FW_CLONES void fw_scale(size_t n, double k, double *y)
{
    for (size_t i = 0; i < n; ++i) y[i] *= k;
}

FW_CLONES void fw_rotate(size_t n, double c, double s, double *restrict a, double *restrict b)
{
    for (size_t i = 0; i < n; ++i) {
        const double x = a[i], y = b[i];
        a[i] = c * x - s * y;
        b[i] = s * x + c * y;
    }
}

FW_CLONES void fw_difference(size_t n, const double *a, const double *b, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = a[i] - b[i];
}

FW_CLONES void fw_centre(size_t n, const double *restrict mean, const double *restrict unit, double *restrict a)
{
    for (size_t i = 0; i < n; ++i) a[i] = (a[i] - mean[i]) * unit[i];
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
    SWEEP(n, const group t = GET(w) + kick * GET(c); PUT(w, t); PUT(x, GET(x) + step * (GET(r) * t)););
}

FW_CLONES void fw_kick_drift_gradient(size_t n, double kick, const double *restrict g, double step,
                                      const double *restrict r, double *restrict w, double *restrict x)
{
    SWEEP(n, const group s = GET(r); const group t = GET(w) + kick * (s * GET(g)); PUT(w, t);
          PUT(x, GET(x) + step * (s * t)););
}

FW_CLONES void fw_kick_gradient(size_t n, double kick, const double *restrict r, const double *restrict g,
                                double *restrict w, double sums[2])
{
    SUM(ww);
    SUM(cc);
    SWEEP(n, const group e = GET(r) * GET(g); const group t = GET(w) + kick * e; PUT(w, t); ADD(ww, t * t);
          ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(cc);
}

FW_CLONES void fw_link(size_t n, double kick, const double *restrict c, double step, const double *restrict r,
                       double *restrict w, const double *restrict x, double *restrict next, double sums[2])
{
    SUM(ww);
    SUM(cc);
    SWEEP(n, const group e = GET(c); const group t = GET(w) + kick * e; const group u = t + kick * e; PUT(w, u);
          PUT(next, GET(x) + step * (GET(r) * u)); ADD(ww, t * t); ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(cc);
}

FW_CLONES void fw_link_gradient(size_t n, double kick, double step, const double *restrict r, double *restrict w,
                                const double *restrict x, double *restrict g, double sums[2])
{
    SUM(ww);
    SUM(cc);
    SWEEP(n, const group s = GET(r); const group e = s * GET(g); const group t = GET(w) + kick * e;
          const group u = t + kick * e; PUT(w, u); PUT(g, GET(x) + step * (s * u)); ADD(ww, t * t); ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(cc);
}

FW_CLONES void fw_whiten(size_t n, const double *restrict r, const double *restrict g, double *restrict c,
                         const double *restrict w, double sums[3])
{
    SUM(ww);
    SUM(wc);
    SUM(cc);
    SWEEP(n, const group e = GET(r) * GET(g); const group t = GET(w); PUT(c, e); ADD(ww, t * t); ADD(wc, t * e);
          ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
    sums[2] = FOLD(cc);
}

FW_CLONES void fw_whitened_sums(size_t n, const double *restrict r, const double *restrict g, const double *restrict w,
                                double sums[3])
{
    SUM(ww);
    SUM(wc);
    SUM(cc);
    SWEEP(n, const group e = GET(r) * GET(g); const group t = GET(w); ADD(ww, t * t); ADD(wc, t * e); ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
    sums[2] = FOLD(cc);
}

FW_CLONES void fw_kicked_sums(size_t n, double kick, const double *restrict r, const double *restrict g,
                              const double *restrict w, double sums[2])
{
    SUM(ww);
    SUM(wc);
    SWEEP(n, const group e = GET(r) * GET(g); const group t = GET(w) + kick * e; ADD(ww, t * t); ADD(wc, t * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
}

FW_CLONES void fw_kick_twice_drift(size_t n, double first, double kick, const double *restrict g, double step,
                                   const double *restrict r, double *restrict w, double *restrict x)
{
    SWEEP(n, const group s = GET(r); const group e = s * GET(g); const group t = (GET(w) + first * e) + kick * e;
          PUT(w, t); PUT(x, GET(x) + step * (s * t)););
}

FW_CLONES void fw_kick(size_t n, double kick, const double *restrict c, double *restrict w, double sums[2])
{
    SUM(ww);
    SUM(wc);
    SWEEP(n, const group e = GET(c); const group t = GET(w) + kick * e; PUT(w, t); ADD(ww, t * t); ADD(wc, t * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
}

FW_CLONES void fw_gram2(size_t n, const double *restrict w, const double *restrict c, double sums[3])
{
    SUM(ww);
    SUM(wc);
    SUM(cc);
    SWEEP(n, const group t = GET(w); const group e = GET(c); ADD(ww, t * t); ADD(wc, t * e); ADD(cc, e * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
    sums[2] = FOLD(cc);
}

FW_CLONES double fw_kick2_drift(size_t n, double kc, const double *restrict c, double kh, const double *restrict h,
                                double step, const double *restrict r, double *restrict w, double *restrict x)
{
    SUM(ww);
    SWEEP(n, const group t = GET(w) + (kc * GET(c) + kh * GET(h)); PUT(w, t); PUT(x, GET(x) + step * (GET(r) * t));
          ADD(ww, t * t););
    return FOLD(ww);
}

/* Maxima need no order, but a lane each keeps the passes in vectors. */
FW_CLONES void fw_kick2_drift_coarsest(size_t n, double kc, const double *restrict c, double kh,
                                       const double *restrict h, double step, const double *restrict r,
                                       double *restrict w, double *restrict x, double sums[2])
{
    double ww[LANES] = {0}, most[LANES] = {0};
    size_t i = 0;
    for (; i + LANES <= n; i += LANES)
        for (size_t j = 0; j < LANES; ++j) {
            const double t = w[i + j] + (kc * c[i + j] + kh * h[i + j]), at = x[i + j] + step * (r[i + j] * t);
            const double spacing = fabs(at) / r[i + j];
            w[i + j] = t;
            x[i + j] = at;
            ww[j] += t * t;
            most[j] = spacing > most[j] ? spacing : most[j];
        }
    for (size_t j = 0; i < n; ++i, ++j) {
        const double t = w[i] + (kc * c[i] + kh * h[i]), at = x[i] + step * (r[i] * t), spacing = fabs(at) / r[i];
        w[i] = t;
        x[i] = at;
        ww[j] += t * t;
        most[j] = spacing > most[j] ? spacing : most[j];
    }
    sums[0] = fold(ww);
    sums[1] = largest(most);
}

FW_CLONES void fw_kick2(size_t n, double kc, const double *restrict c, double kh, const double *restrict h,
                        double *restrict w, double sums[3])
{
    SUM(ww);
    SUM(wc);
    SUM(wh);
    SWEEP(n, const group e = GET(c); const group f = GET(h); const group t = GET(w) + (kc * e + kh * f); PUT(w, t);
          ADD(ww, t * t); ADD(wc, t * e); ADD(wh, t * f););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
    sums[2] = FOLD(wh);
}

FW_CLONES void fw_blend(size_t n, double a, double *restrict w, double b, const double *restrict c, double sums[2])
{
    SUM(ww);
    SUM(wc);
    SWEEP(n, const group e = GET(c); const group t = a * GET(w) + b * e; PUT(w, t); ADD(ww, t * t); ADD(wc, t * e););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wc);
}

FW_CLONES double fw_square_of_sum(size_t n, double a, const double *restrict w, double b, const double *restrict c)
{
    SUM(s);
    SWEEP(n, const group t = a * GET(w) + b * GET(c); ADD(s, t * t););
    return FOLD(s);
}

FW_CLONES void fw_kick2_spread(size_t n, double kc, const double *restrict c, double kh, const double *restrict h,
                               const double *restrict r, double *restrict w, double *restrict v, double sums[2])
{
    SUM(ww);
    SUM(wh);
    SWEEP(n, const group f = GET(h); const group t = GET(w) + (kc * GET(c) + kh * f); PUT(w, t); PUT(v, GET(r) * t);
          ADD(ww, t * t); ADD(wh, t * f););
    sums[0] = FOLD(ww);
    sums[1] = FOLD(wh);
}

FW_CLONES double fw_whiten_spread(size_t n, const double *restrict r, const double *restrict g, double *restrict c,
                                  double *restrict v)
{
    SUM(cc);
    SWEEP(n, const group s = GET(r); const group e = s * GET(g); PUT(c, e); PUT(v, s * e); ADD(cc, e * e););
    return FOLD(cc);
}

FW_CLONES double fw_whiten_square(size_t n, const double *restrict r, const double *restrict g, double *restrict c)
{
    SUM(cc);
    SWEEP(n, const group e = GET(r) * GET(g); PUT(c, e); ADD(cc, e * e););
    return FOLD(cc);
}

FW_CLONES double fw_coarsest(size_t n, const double *restrict r, const double *restrict x)
{
    double most[LANES] = {0};
    for (size_t i = 0; i < n; ++i) {
        const double spacing = fabs(x[i]) / r[i];
        if (spacing > most[i % LANES]) most[i % LANES] = spacing;
    }
    return largest(most);
}

FW_CLONES void fw_probe(size_t n, double h, const double *restrict x, const double *restrict r, const double *restrict p,
                        double *restrict out)
{
    for (size_t i = 0; i < n; ++i) out[i] = x[i] + h * (r[i] * p[i]);
}

FW_CLONES void fw_difference_over(size_t n, const double *a, const double *b, double rate, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = (a[i] - b[i]) * rate;
}

FW_CLONES void fw_whiten_product(size_t n, const double *restrict r, const double *restrict q, const double *restrict c,
                                 double *restrict y, double sums[2])
{
    SUM(cy);
    SUM(yy);
    SWEEP(n, const group e = GET(r) * GET(q); PUT(y, e); ADD(cy, GET(c) * e); ADD(yy, e * e););
    sums[0] = FOLD(cy);
    sums[1] = FOLD(yy);
}

FW_CLONES void fw_whiten_difference(size_t n, double rate, const double *restrict r, const double *restrict q,
                                    const double *restrict g, double *restrict y, double sums[2])
{
    SUM(cy);
    SUM(yy);
    SWEEP(n, const group s = GET(r); const group b = GET(g); const group e = s * ((GET(q) - b) * rate); PUT(y, e);
          ADD(cy, s * b * e); ADD(yy, e * e););
    sums[0] = FOLD(cy);
    sums[1] = FOLD(yy);
}

FW_CLONES double fw_product_dot(size_t n, const double *restrict r, const double *restrict q, const double *restrict w)
{
    SUM(s);
    SWEEP(n, ADD(s, GET(w) * (GET(r) * GET(q))););
    return FOLD(s);
}

FW_CLONES double fw_difference_dot(size_t n, double rate, const double *restrict r, const double *restrict q,
                                   const double *restrict g, const double *restrict w)
{
    SUM(s);
    SWEEP(n, ADD(s, GET(w) * (GET(r) * ((GET(q) - GET(g)) * rate))););
    return FOLD(s);
}

FW_CLONES void fw_product_sums(size_t n, const double *restrict r, const double *restrict q, const double *restrict w,
                               const double *restrict c, const double *restrict p, double sums[4])
{
    SUM(yw);
    SUM(yc);
    SUM(yp);
    SUM(wp);
    SWEEP(n, const group y = GET(r) * GET(q); const group t = GET(w); const group f = GET(p); ADD(yw, y * t);
          ADD(yc, y * GET(c)); ADD(yp, y * f); ADD(wp, t * f););
    sums[0] = FOLD(yw);
    sums[1] = FOLD(yc);
    sums[2] = FOLD(yp);
    sums[3] = FOLD(wp);
}

FW_CLONES void fw_difference_sums(size_t n, double rate, const double *restrict r, const double *restrict q,
                                  const double *restrict g, const double *restrict w, const double *restrict p,
                                  double sums[4])
{
    SUM(yw);
    SUM(yc);
    SUM(yp);
    SUM(wp);
    SWEEP(n, const group s = GET(r); const group b = GET(g); const group y = s * ((GET(q) - b) * rate);
          const group t = GET(w); const group f = GET(p); ADD(yw, y * t); ADD(yc, y * (s * b)); ADD(yp, y * f);
          ADD(wp, t * f););
    sums[0] = FOLD(yw);
    sums[1] = FOLD(yc);
    sums[2] = FOLD(yp);
    sums[3] = FOLD(wp);
}

FW_CLONES double fw_ratio_dot(size_t n, const double *restrict a, const double *restrict b,
                              const double *restrict delta)
{
    double s[LANES] = {0};
    for (size_t i = 0; i < n; ++i) s[i % LANES] += a[i] * (b[i] / delta[i]);
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
    for (size_t i = 0; i < n; ++i) s[i % LANES] += u[i] / sqrt(delta[i]) * z[i];
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
    const double counts = count > 1.0 ? 1.0 : 0.0, share = 1.0 / count;
    SWEEP(n, const group m = GET(mean); const group away = GET(a) - m; PUT(roots, GET(roots) + counts * ROOT(away));
          PUT(mean, m + away * share););
}

FW_CLONES void fw_gather_moments(size_t n, double count, const double *restrict a, double *restrict mean,
                                 double *restrict squares)
{
    const double share = 1.0 / count;
    for (size_t i = 0; i < n; ++i) {
        const double away = a[i] - mean[i], now = mean[i] + away * share;
        squares[i] += away * (a[i] - now);
        mean[i] = now;
    }
}

FW_CLONES void fw_add_pair(size_t n, const double *restrict a, const double *restrict b, double *restrict out,
                           double sums[2])
{
    SUM(ab);
    SUM(aa);
    SWEEP(n, const group x = GET(a); const group y = GET(b); ADD(ab, x * y); ADD(aa, x * x); PUT(out, x + y););
    sums[0] = FOLD(ab);
    sums[1] = FOLD(aa);
}

FW_CLONES void fw_seam(size_t n, const double *restrict fa, const double *restrict la, const double *restrict pa, const double *restrict ra,
                       const double *restrict fb, const double *restrict lb, const double *restrict pb, const double *restrict rb, double *restrict out,
                       double sums[6])
{
    SUM(s0);
    SUM(s1);
    SUM(s2);
    SUM(s3);
    SUM(s4);
    SUM(s5);
    SWEEP(n, const group f_a = GET(fa); const group l_b = GET(lb); const group r_a = GET(ra); const group r_b = GET(rb);
          const group rho = r_a + r_b; const group near_b = r_a + GET(pb); const group near_a = r_b + GET(pa);
          ADD(s0, f_a * rho); ADD(s1, l_b * rho); ADD(s2, f_a * near_b); ADD(s3, GET(fb) * near_b);
          ADD(s4, GET(la) * near_a); ADD(s5, l_b * near_a); PUT(out, rho););
    sums[0] = FOLD(s0);
    sums[1] = FOLD(s1);
    sums[2] = FOLD(s2);
    sums[3] = FOLD(s3);
    sums[4] = FOLD(s4);
    sums[5] = FOLD(s5);
}
