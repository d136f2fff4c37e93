/* The only loops over the dimension.
 *
 * Sums run in eight fixed lanes (element i belongs to lane i mod 8) and are folded in one fixed order, and the build
 * forbids contraction of a*b+c, so a result has the same bits on every processor and in every function clone.
 *
 * Beyond the caches a step costs what it moves. Vectors of d numbers read + written in one step, the caller's functions
 * apart, without learned directions. A single step begins and ends with a whole state (x, w, c, g and, where H is asked,
 * H c; leapfrog does without c), because no-U-turn paths weigh, test and keep states. "In a row", as on jittered paths:
 * after the first of steps that follow each other and are asked for their energies alone. "Least": then between two
 * calls, or two sums that the next pass needs, each vector is read once and only what has changed is written.
 *
 *   motion                            passes                                                       moved   least
 *   leapfrog                          kick and drift 6, kick 4                                        10      10
 *   leapfrog, in a row                kick, kick and drift 6                                           6       6
 *   surrogate, either scheme          kick and drift 6, whiten 4, kick 3                              13      13
 *   surrogate, in a row               kick, kick and drift 6, whiten 3, kick 3                        12      12
 *   isokinetic                        kick and drift 6, whiten 4, blend 3                             13      13
 *   product, split                    kick and drift 7, whiten 4, H c 4, kick 6, H w 3, kick 3        27      26
 *   product, semi-explicit            S w 3, H w 5, kick and drift 7, whiten 4, H c 4, S w 3,         35      34
 *                                     H w 5, kick 4
 *   difference, split                 kick and drift 7, whiten 3, probe 4, H c 4, kick 4, probe 4,    33      33
 *                                     H w 4, kick 3
 *   difference, semi-explicit         probe 4, H w 5, kick and drift 7, whiten 3, probe 4, H c 4,     40      39
 *                                     probe 4, H w 5, kick 4
 *
 * With k learned directions a leapfrog step moves 14 + 11 k, in a row 9 + 11 k; a surrogate step is always a single one.
 *
 * The isokinetic motion reads two vectors more in a turn that begins almost against the gradient. Its steps in a row
 * would move 12, as those of the surrogate do: both need sums of w before they know the next kick. But such a turn reads w
 * itself, which would have to be made first after all.
 *
 * What is left, one vector each: in the row "product, split" H c as the caller gave it could be kept in the place of H c whitened;
 * in both semi-explicit rows the S w or the probe of the second half could go with H c.
 */
#ifndef FW_KERNELS_H
#define FW_KERNELS_H

#include <stddef.h>
#include <string.h>

#if !defined(FW_NO_CLONES) && defined(__x86_64__) && defined(__linux__) && defined(__GLIBC__) && defined(__GNUC__) &&   \
    !defined(__clang__) && __GNUC__ >= 12
#define FW_CLONES __attribute__((target_clones("arch=x86-64-v4", "arch=x86-64-v3", "default")))
#else
#define FW_CLONES
#endif

/* sum a*b; sum a*a/b */
double fw_dot(size_t n, const double *a, const double *b);
double fw_sum_square_ratio(size_t n, const double *a, const double *b);
double fw_sum_log(size_t n, const double *a);
int fw_all_finite(size_t n, const double *a);
int fw_all_positive(size_t n, const double *a);

/* Here, as a call costs more than copying a few numbers. */
static inline void fw_copy(size_t n, const double *restrict from, double *restrict to)
{
    if (n > 64) {
        memcpy(to, from, n * sizeof *to);
        return;
    }
    for (; n >= 4; n -= 4, from += 4, to += 4) {
        const double a = from[0], b = from[1], c = from[2], d = from[3];
        to[0] = a;
        to[1] = b;
        to[2] = c;
        to[3] = d;
    }
    switch (n) {
    case 3: to[2] = from[2]; /* fall through */
    case 2: to[1] = from[1]; /* fall through */
    case 1: to[0] = from[0]; break;
    default: break;
    }
}

void fw_scale_by(size_t n, const double *a, const double *b, double *out);   /* out = a*b */
void fw_divide_by(size_t n, const double *a, const double *b, double *out);  /* out = a/b */
void fw_axpy(size_t n, double k, const double *a, double *y);                /* y += k a */
void fw_drift(size_t n, double k, const double *r, const double *w, double *x); /* x += k r*w */

void fw_scale(size_t n, double k, double *y);                                /* y *= k */
void fw_rotate(size_t n, double c, double s, double *a, double *b);          /* a, b = c a - s b, s a + c b */
void fw_difference(size_t n, const double *a, const double *b, double *out); /* out = a - b */
void fw_centre(size_t n, const double *mean, const double *unit, double *a);    /* a = (a - mean) unit */
void fw_add_squares(size_t n, const double *a, double *sum);                  /* sum += a*a */
/* Gram matrix (rows x rows, symmetric, row-major) of vectors of n numbers. */
void fw_gram(size_t n, size_t rows, const double *const *vectors, double *out);

/* w += kick c; x += step r*w */
void fw_kick_drift(size_t n, double kick, const double *c, double step, const double *r, double *w, double *x);
/* the same with c = r*g, which is not kept */
void fw_kick_drift_gradient(size_t n, double kick, const double *g, double step, const double *r, double *w, double *x);
/* c = r*g, which is not kept; w += kick c; sums: w.w, c.c with the new w */
void fw_kick_gradient(size_t n, double kick, const double *r, const double *g, double *w, double sums[2]);
/* The end of a step and the beginning of the next in one pass: w += kick c; sums: w.w, c.c with this w; once more
 * w += kick c; x + step r*w into next. Then with c = r*g, which is not kept, and x + step r*w in the place of g. */
void fw_link(size_t n, double kick, const double *c, double step, const double *r, double *w, const double *x,
             double *next, double sums[2]);
void fw_link_gradient(size_t n, double kick, double step, const double *r, double *w, const double *x, double *g,
                      double sums[2]);
/* c = r*g; sums: w.w, w.c, c.c */
void fw_whiten(size_t n, const double *r, const double *g, double *c, const double *w, double sums[3]);
/* The sums alone of fw_whiten, and of fw_kick with c = r*g; then with that c, w += first c; w += kick c;
 * x += step r*w. */
void fw_whitened_sums(size_t n, const double *r, const double *g, const double *w, double sums[3]);
void fw_kicked_sums(size_t n, double kick, const double *r, const double *g, const double *w, double sums[2]);
void fw_kick_twice_drift(size_t n, double first, double kick, const double *g, double step, const double *r, double *w,
                         double *x);
/* w += kick c; sums: w.w, w.c */
void fw_kick(size_t n, double kick, const double *c, double *w, double sums[2]);
/* sums: w.w, w.c, c.c */
void fw_gram2(size_t n, const double *w, const double *c, double sums[3]);

/* w += kc c + kh h; x += step r*w; returns w.w */
double fw_kick2_drift(size_t n, double kc, const double *c, double kh, const double *h, double step, const double *r,
                      double *w, double *x);
/* the same; sums: w.w, largest |x|/r */
void fw_kick2_drift_coarsest(size_t n, double kc, const double *c, double kh, const double *h, double step,
                             const double *r, double *w, double *x, double sums[2]);
/* w += kc c + kh h; sums: w.w, w.c, w.h */
void fw_kick2(size_t n, double kc, const double *c, double kh, const double *h, double *w, double sums[3]);
/* the same, and v = r*w; sums: w.w, w.h */
void fw_kick2_spread(size_t n, double kc, const double *c, double kh, const double *h, const double *r, double *w,
                     double *v, double sums[2]);
/* c = r*g; v = r*c; returns c.c */
double fw_whiten_spread(size_t n, const double *r, const double *g, double *c, double *v);
/* c = r*g; returns c.c */
double fw_whiten_square(size_t n, const double *r, const double *g, double *c);
double fw_coarsest(size_t n, const double *r, const double *x); /* largest |x|/r */
/* out = x + h r*p */
void fw_probe(size_t n, double h, const double *x, const double *r, const double *p, double *out);
/* out = (a - b) rate */
void fw_difference_over(size_t n, const double *a, const double *b, double rate, double *out);
/* y = r*q; sums: c.y, y.y. Then with y = r*(q - g) rate and c = r*g. */
void fw_whiten_product(size_t n, const double *r, const double *q, const double *c, double *y, double sums[2]);
void fw_whiten_difference(size_t n, double rate, const double *r, const double *q, const double *g, double *y,
                          double sums[2]);
/* w.y of the same y, which are not kept */
double fw_product_dot(size_t n, const double *r, const double *q, const double *w);
double fw_difference_dot(size_t n, double rate, const double *r, const double *q, const double *g, const double *w);
/* y.w, y.c, y.p, w.p of the same y */
void fw_product_sums(size_t n, const double *r, const double *q, const double *w, const double *c, const double *p,
                     double sums[4]);
void fw_difference_sums(size_t n, double rate, const double *r, const double *q, const double *g, const double *w,
                        const double *p, double sums[4]);

/* w = a w + b c; sums: w.w, w.c with the new w. Then sum (a w + b c)^2 by itself. */
void fw_blend(size_t n, double a, double *w, double b, const double *c, double sums[2]);
double fw_square_of_sum(size_t n, double a, const double *w, double b, const double *c);

/* metric operations: v/delta etc. with one rank-one term; see metric.c */
double fw_ratio_dot(size_t n, const double *a, const double *b, const double *delta);       /* sum a*b/delta */
void fw_apply_out(size_t n, const double *delta, const double *v, double k, const double *u, double *out);
void fw_solve_out(size_t n, const double *delta, const double *p, double k, const double *u, double *out);
double fw_root_ratio_dot(size_t n, const double *u, const double *z, const double *delta);  /* sum u*z/sqrt(delta) */
void fw_velocity_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out);
void fw_momentum_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out);

/* A value more: roots += sqrt|a - mean| (from the second value on), then mean takes it in. count: values with this. */
void fw_gather(size_t n, double count, const double *a, double *mean, double *roots);

/* A value more: mean and sum of squared deviations take it in (Welford 1962). count: values with this. */
void fw_gather_moments(size_t n, double count, const double *a, double *mean, double *squares);

/* out = a + b; sums: a.b, a.a */
void fw_add_pair(size_t n, const double *a, const double *b, double *out, double sums[2]);

/* No-U-turn test of two joined pieces A and B: rho = ra + rb into out (an array of its own);
 * sums: fa.rho, lb.rho, fa.(ra+pb), fb.(ra+pb), la.(rb+pa), lb.(rb+pa) */
void fw_seam(size_t n, const double *fa, const double *la, const double *pa, const double *ra, const double *fb,
             const double *lb, const double *pb, const double *rb, double *out, double sums[6]);

#endif
