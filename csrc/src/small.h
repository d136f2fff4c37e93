/* Dense symmetric algebra of a few dozen rows, row-major. Not fast, but accurate, deterministic and free of libraries. */
#ifndef FW_SMALL_H
#define FW_SMALL_H

#include <stddef.h>

/* Eigenvalues (descending) and eigenvectors (columns of v, n x n) of the symmetric a, which is destroyed. */
void fw_small_eigen(size_t n, double *a, double *values, double *v);
/* The same of a positive semidefinite a of at most FW_SMALL_MOST rows: only the r eigenvalues above about 1e-13 of the
 * largest, and their eigenvectors (n x r, row-major); returns r. Time n^2 r + r^3: Gram matrices of many rows in few
 * dimensions have a small r, and rotating their zeros would take most of it. */
#define FW_SMALL_MOST 64
size_t fw_small_range(size_t n, double *a, double *values, double *v);
/* a = l l^T for a positive definite a; l replaces the lower triangle. 0 when a is not positive definite. */
int fw_small_cholesky(size_t n, double *a);

#endif
