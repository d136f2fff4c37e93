/* Correlation matrices through canonical partial correlations (Lewandowski, Kurowicka & Joe 2009, J. Multivariate
 * Anal. 100), which are the coordinates of the rows of the Cholesky factor on the unit sphere:
 *
 *   z_ij = tanh(y_ij), c_ij = sech(y_ij), s_i0 = 1, s_i,j+1 = s_ij c_ij, L_ij = z_ij s_ij (j < i), L_ii = s_ii,
 *   R = L L^T.
 *
 * Entry (i, j), i > j, stands at place i (i - 1) / 2 + j. With row i of R taken as a function of row i of L the
 * Jacobian is triangular with L_jj on its diagonal; with L a function of z, with s_ij; and dz/dy = c^2. Collecting the
 * powers of each c_ik (i > k, from 0) gives log |dR/dy| = sum (n - k) log sech(y_ik). */
#include <float.h>
#include <math.h>
#include <string.h>

#include "maps.h"

#define PLACE(i, j) ((i) * ((i)-1) / 2 + (j))
#define ROW(L, i) ((L) + (i) * ((i) + 1) / 2)

static size_t pairs(size_t n)
{
    return n * (n - 1) / 2;
}

/* Scratch: y, z, c, L, and as much again for bend, which also keeps its results there. */
static size_t half_scratch(size_t n)
{
    return 3 * pairs(n) + n * (n + 1) / 2;
}

size_t fw_correlation_scratch(size_t n)
{
    return 2 * half_scratch(n) + n * (n + 1) / 2 + 2 * pairs(n);
}

double fw_correlation_apply(size_t n, double *scratch, const double *y, double *x)
{
    const size_t m = pairs(n);
    double *z = scratch + m, *c = scratch + 2 * m, *L = scratch + 3 * m;
    const double most = 1.0 - 0.5 * DBL_EPSILON;
    double total = 0.0;
    memmove(scratch, y, m * sizeof *y);
    L[0] = 1.0;
    for (size_t i = 1; i < n; ++i) {
        double *row = ROW(L, i), s = 1.0;
        for (size_t j = 0; j < i; ++j) {
            const size_t at = PLACE(i, j);
            const double size = fabs(y[at]), t = exp(-2.0 * size);
            z[at] = tanh(y[at]);
            c[at] = 2.0 * exp(-size) / (1.0 + t);
            total += (double)(n - j) * (log(2.0) - size - log1p(t));
            row[j] = z[at] * s;
            s *= c[at];
        }
        row[i] = s;
        for (size_t j = 0; j < i; ++j) {
            const double *other = ROW(L, j);
            double r = 0.0;
            for (size_t k = 0; k <= j; ++k) r += row[k] * other[k];
            x[PLACE(i, j)] = r > most ? most : r < -most ? -most : r;
        }
    }
    return total;
}

/* Rounding moves R by n epsilon at most, so its smallest eigenvalue must be well above that. It is at least det R / e
 * (the others have a product of at most (n / (n - 1))^(n - 1)), and at least 1 / |L^-1|^2 in the Frobenius norm. */
int fw_correlation_singular(size_t n, double *scratch)
{
    const double *L = scratch + 3 * pairs(n), least = 64.0 * (double)n * DBL_EPSILON;
    double *column = scratch + 2 * half_scratch(n), det = 1.0, sum = 0.0;
    for (size_t i = 1; i < n; ++i) det *= ROW(L, i)[i] * ROW(L, i)[i];
    if (det >= 2.8 * least) return 0;
    for (size_t j = 0; j < n; ++j)
        for (size_t i = j; i < n; ++i) {
            const double *row = ROW(L, i);
            double t = i == j ? 1.0 : 0.0;
            for (size_t k = j; k < i; ++k) t -= row[k] * column[k];
            column[i] = t / row[i];
            sum += column[i] * column[i];
        }
    return !(1.0 >= least * sum);
}

/* Lbar = (S L) for S symmetric with g below and above its diagonal of zeros; then backwards through each row. */
void fw_correlation_pull(size_t n, double *scratch, const double *g, int with_jacobian, double *out)
{
    const size_t m = pairs(n);
    const double *z = scratch + m, *c = scratch + 2 * m, *L = scratch + 3 * m;
    double *adjoint = scratch + 2 * half_scratch(n);
    memset(adjoint, 0, n * (n + 1) / 2 * sizeof *adjoint);
    for (size_t i = 1; i < n; ++i)
        for (size_t j = 0; j < i; ++j) {
            const double gij = g[PLACE(i, j)];
            const double *a = ROW(L, i), *b = ROW(L, j);
            double *abar = ROW(adjoint, i), *bbar = ROW(adjoint, j);
            for (size_t k = 0; k <= j; ++k) {
                abar[k] += gij * b[k];
                bbar[k] += gij * a[k];
            }
        }
    for (size_t i = 1; i < n; ++i) {
        double s[2] = {1.0, 0.0};
        for (size_t j = 0; j < i; ++j) { /* out keeps s_ij for the way back */
            out[PLACE(i, j)] = s[0];
            s[0] *= c[PLACE(i, j)];
        }
        const double *bar = ROW(adjoint, i);
        double sbar = bar[i];
        for (size_t j = i; j > 0; --j) {
            const size_t at = PLACE(i, j - 1);
            const double sij = out[at], zbar = bar[j - 1] * sij, cbar = sbar * sij;
            sbar = sbar * c[at] + bar[j - 1] * z[at];
            out[at] = zbar * c[at] * c[at] - cbar * c[at] * z[at] -
                      (with_jacobian ? (double)(n - (j - 1)) * z[at] : 0.0);
        }
    }
}

void fw_correlation_push(size_t n, double *scratch, const double *p, double *out)
{
    const size_t m = pairs(n);
    const double *z = scratch + m, *c = scratch + 2 * m, *L = scratch + 3 * m;
    double *moved = scratch + 2 * half_scratch(n);
    moved[0] = 0.0;
    for (size_t i = 1; i < n; ++i) {
        double *row = ROW(moved, i), s = 1.0, sdot = 0.0;
        for (size_t j = 0; j < i; ++j) {
            const size_t at = PLACE(i, j);
            row[j] = c[at] * c[at] * p[at] * s + z[at] * sdot;
            sdot = sdot * c[at] - s * c[at] * z[at] * p[at];
            s *= c[at];
        }
        row[i] = sdot;
        for (size_t j = 0; j < i; ++j) {
            const double *a = ROW(L, i), *b = ROW(L, j), *bdot = ROW(moved, j);
            double r = 0.0;
            for (size_t k = 0; k <= j; ++k) r += row[k] * b[k] + a[k] * bdot[k];
            out[PLACE(i, j)] = r;
        }
    }
}

/* Central differences of pull along p; y is of order 1 (tanh bends there), so the step needs no other scale. */
void fw_correlation_bend(size_t n, double *scratch, const double *g, const double *p, double *out)
{
    const size_t m = pairs(n), half = half_scratch(n);
    double *first = scratch + 2 * half + n * (n + 1) / 2, *spare = first + m, size = 0.0;
    for (size_t i = 0; i < m; ++i) size = fmax(size, fabs(p[i]));
    if (!(size > 0.0)) return;
    const double h = cbrt(DBL_EPSILON) / size;
    memcpy(scratch + half, scratch, half * sizeof *scratch);
    for (int side = 1; side >= -1; side -= 2) {
        for (size_t i = 0; i < m; ++i) spare[i] = scratch[half + i] + side * h * p[i];
        fw_correlation_apply(n, scratch, spare, first);
        fw_correlation_pull(n, scratch, g, 1, spare);
        for (size_t i = 0; i < m; ++i) out[i] += side * spare[i] / (2.0 * h);
    }
    memcpy(scratch, scratch + half, half * sizeof *scratch);
}

/* Row by row: L from R by Cholesky, the partial correlations from L; NaN where R is not positive definite. */
void fw_correlation_invert(size_t n, double *scratch, const double *x, double *y)
{
    double *L = scratch + half_scratch(n) + 3 * pairs(n);
    L[0] = 1.0;
    for (size_t i = 1; i < n; ++i) {
        double *row = ROW(L, i), s = 1.0;
        for (size_t j = 0; j < i; ++j) {
            const double *other = ROW(L, j);
            double r = x[PLACE(i, j)];
            for (size_t k = 0; k < j; ++k) r -= row[k] * other[k];
            row[j] = r / other[j];
            const double z = row[j] / s;
            y[PLACE(i, j)] = fabs(z) < 1.0 ? atanh(z) : NAN;
            s *= sqrt((1.0 - z) * (1.0 + z));
        }
        row[i] = s;
    }
}
