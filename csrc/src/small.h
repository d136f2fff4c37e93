/* Dense symmetric algebra of a few dozen rows, row-major. Not fast, but accurate, deterministic and free of libraries. */
#ifndef FW_SMALL_H
#define FW_SMALL_H

#include <stddef.h>

/* Eigenvalues (descending) and eigenvectors (columns of v, n x n) of the symmetric a, which is destroyed. */
void fw_small_eigen(size_t n, double *a, double *values, double *v);
/* a = l l^T for a positive definite a; l replaces the lower triangle. 0 when a is not positive definite. */
int fw_small_cholesky(size_t n, double *a);

#endif
