/* Dense symmetric algebra of a few dozen rows, row-major: accurate, deterministic and free of libraries. */
#ifndef FW_SMALL_H
#define FW_SMALL_H

#include <stddef.h>

#define FW_SMALL_MOST 64 /* most rows where eigenvalues are asked */

/* Eigenvalues (descending) and eigenvectors (rows of v, n x n) of the symmetric a, which is destroyed. */
void fw_small_eigen(size_t n, double *a, double *values, double *v);
/* The same of a positive semidefinite a: only the r eigenvalues above about 1e-13 of the largest, and their
 * eigenvectors (r x n); returns r. Time n^2 r + r^3: Gram matrices of many rows in few dimensions have a small r, and
 * rotating their zeros would take most of it. */
size_t fw_small_range(size_t n, double *a, double *values, double *v);
/* a = l l^T for a positive definite a; l replaces the lower triangle. 0 when a is not positive definite. */
int fw_small_cholesky(size_t n, double *a);
/* The same for a positive semidefinite a with its rows and columns in the order that is written, largest remaining
 * diagonal entry first; stops where that is 1e-14 of the first, and returns how many columns of l there are. Nothing
 * but the lower triangle of l has a meaning afterwards; n may be any number, left is room for n. */
size_t fw_small_pivoted(size_t n, double *a, size_t *order, double *left);
/* x with l^T x = b in the place of b, l the lower triangle of rows of `width` numbers. */
void fw_small_solve(size_t n, const double *l, size_t width, double *b);

#endif
