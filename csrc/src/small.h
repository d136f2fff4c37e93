/* Dense symmetric algebra of a few dozen rows, row-major: accurate, deterministic and free of libraries. */
#ifndef FW_SMALL_H
#define FW_SMALL_H

#include <stddef.h>

#define FW_SMALL_MOST 64   /* most rows where eigenvalues are asked */
#define FW_SMALL_FLOOR 1e-14 /* pivots of a Gram matrix below this are rounding */

/* The r eigenvalues (descending) of a positive semidefinite a that its pivots, down to `floor` of the first, let see, and
 * their eigenvectors (rows of v, r x n); returns r. Small eigenvalues of graded matrices keep their digits. a is
 * destroyed. Time n r^2: Gram matrices of many rows in few dimensions have a small r. */
size_t fw_small_eigen(size_t n, double *a, double floor, double *values, double *v);
/* a = l l^T for a positive definite a; l replaces the lower triangle. 0 when a is not positive definite. */
int fw_small_cholesky(size_t n, double *a);
/* The same for a positive semidefinite a with its rows and columns in the order that is written, largest remaining
 * diagonal entry first; stops where that is not above `floor` of the first, and returns how many columns of l there are. Nothing
 * but the lower triangle of l has a meaning afterwards; n may be any number, left is room for n. */
size_t fw_small_pivoted(size_t n, double *a, double floor, size_t *order, double *left);
/* x with l^T x = b in the place of b, l the lower triangle of rows of `width` numbers. */
void fw_small_solve(size_t n, const double *l, size_t width, double *b);

#endif
