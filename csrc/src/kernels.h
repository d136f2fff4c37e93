/* The only loops over the dimension.
 *
 * Sums run in eight fixed lanes (element i belongs to lane i mod 8) and are folded in one fixed order, and the build
 * forbids contraction of a*b+c, so a result has the same bits on every processor and in every function clone.
 */
#ifndef FW_KERNELS_H
#define FW_KERNELS_H

#include <stddef.h>

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

void fw_copy(size_t n, const double *from, double *to);
void fw_scale_by(size_t n, const double *a, const double *b, double *out);   /* out = a*b */
void fw_divide_by(size_t n, const double *a, const double *b, double *out);  /* out = a/b */
void fw_axpy(size_t n, double k, const double *a, double *y);                /* y += k a */
void fw_drift(size_t n, double k, const double *r, const double *w, double *x); /* x += k r*w */

void fw_scale(size_t n, double k, double *y);                                /* y *= k */
void fw_difference(size_t n, const double *a, const double *b, double *out); /* out = a - b */
void fw_add_squares(size_t n, const double *a, double *sum);                  /* sum += a*a */
/* Gram matrix (rows x rows, symmetric, row-major) of vectors of n numbers. */
void fw_gram(size_t n, size_t rows, const double *const *vectors, double *out);

/* w += kick c; x += step r*w */
void fw_kick_drift(size_t n, double kick, const double *c, double step, const double *r, double *w, double *x);
/* c = r*g; w += kick c; sums: w.w, w.c, c.c with the new w */
void fw_whiten_kick(size_t n, double kick, const double *r, const double *g, double *c, double *w, double sums[3]);
/* c = r*g; sums: w.w, w.c, c.c */
void fw_whiten(size_t n, const double *r, const double *g, double *c, const double *w, double sums[3]);
/* w += kick c; sums: w.w, w.c */
void fw_kick(size_t n, double kick, const double *c, double *w, double sums[2]);
/* sums: w.w, w.c, c.c */
void fw_gram2(size_t n, const double *w, const double *c, double sums[3]);
/* w += kc c + kh h */
void fw_kick2(size_t n, double kc, const double *c, double kh, const double *h, double *w);

/* metric operations: v/delta etc. with one rank-one term; see metric.c */
double fw_ratio_dot(size_t n, const double *a, const double *b, const double *delta);       /* sum a*b/delta */
void fw_apply_out(size_t n, const double *delta, const double *v, double k, const double *u, double *out);
void fw_solve_out(size_t n, const double *delta, const double *p, double k, const double *u, double *out);
double fw_root_ratio_dot(size_t n, const double *u, const double *z, const double *delta);  /* sum u*z/sqrt(delta) */
void fw_velocity_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out);
void fw_momentum_out(size_t n, const double *delta, const double *z, double k, const double *u, double *out);

/* A value more: roots += sqrt|a - mean| (from the second value on), then mean takes it in. count: values with this. */
void fw_gather(size_t n, double count, const double *a, double *mean, double *roots);

/* out = a + b; sums: a.b, a.a */
void fw_add_pair(size_t n, const double *a, const double *b, double *out, double sums[2]);

/* No-U-turn test of two joined pieces A and B: rho = ra + rb into out (an array of its own);
 * sums: fa.rho, lb.rho, fa.(ra+pb), fb.(ra+pb), la.(rb+pa), lb.(rb+pa) */
void fw_seam(size_t n, const double *fa, const double *la, const double *pa, const double *ra, const double *fb,
             const double *lb, const double *pb, const double *rb, double *out, double sums[6]);

/* The same where ra, rb and out sum the mean velocities of the steps inside a piece, and edge is that of the step across
 * the seam; the momenta of a piece are then (steps inside) + (first + last) / 2. */
void fw_seam_steps(size_t n, const double *fa, const double *la, const double *ra, const double *edge, const double *fb,
                   const double *lb, const double *rb, double *out, double sums[6]);

#endif
