#include "small.h"

#include <math.h>

#include "kernels.h"

static void swap(double *a, double *b)
{
    const double t = *a;
    *a = *b;
    *b = t;
}

/* One Jacobi rotation that annihilates a[p][q]; Golub & Van Loan, Matrix Computations, section 8.5. */
static void rotate(size_t n, double *a, double *v, size_t p, size_t q)
{
    const double apq = a[p * n + q], app = a[p * n + p], aqq = a[q * n + q];
    const double theta = (aqq - app) / (2.0 * apq);
    const double t = (theta >= 0.0 ? 1.0 : -1.0) / (fabs(theta) + sqrt(theta * theta + 1.0));
    const double c = 1.0 / sqrt(t * t + 1.0), s = t * c;
    fw_rotate(n, c, s, a + p * n, a + q * n);
    fw_rotate(n, c, s, v + p * n, v + q * n);
    a[p * n + p] = app - t * apq;
    a[q * n + q] = aqq + t * apq;
    a[p * n + q] = a[q * n + p] = 0.0;
    for (size_t i = 0; i < n; ++i) {
        a[i * n + p] = a[p * n + i];
        a[i * n + q] = a[q * n + i];
    }
}

void fw_small_eigen(size_t n, double *a, double *values, double *v)
{
    double root[FW_SMALL_MOST];
    for (size_t i = 0; i < n * n; ++i) v[i] = 0.0;
    for (size_t i = 0; i < n; ++i) {
        v[i * n + i] = 1.0;
        root[i] = sqrt(fabs(a[i * n + i]));
    }
    for (int sweep = 0; sweep < 60; ++sweep) {
        int rotated = 0;
        for (size_t p = 0; p + 1 < n; ++p)
            for (size_t q = p + 1; q < n; ++q) {
                /* relative to both diagonal entries: small eigenvalues of graded matrices keep their digits */
                if (!(fabs(a[p * n + q]) > 1e-16 * root[p] * root[q])) continue;
                rotate(n, a, v, p, q);
                root[p] = sqrt(fabs(a[p * n + p]));
                root[q] = sqrt(fabs(a[q * n + q]));
                rotated = 1;
            }
        if (!rotated) break;
    }
    for (size_t i = 0; i < n; ++i) values[i] = a[i * n + i];
    for (size_t i = 0; i < n; ++i) {
        size_t largest = i;
        for (size_t j = i + 1; j < n; ++j)
            if (values[j] > values[largest]) largest = j;
        if (largest == i) continue;
        swap(values + i, values + largest);
        for (size_t j = 0; j < n; ++j) swap(v + i * n + j, v + largest * n + j);
    }
}

/* Golub & Van Loan, section 4.2.8. Column r of l waits for its pivot, so a row of a holds l before it and a behind. */
size_t fw_small_pivoted(size_t n, double *a, size_t *order, double *left)
{
    double first = 0.0;
    for (size_t i = 0; i < n; ++i) {
        order[i] = i;
        left[i] = a[i * n + i];
        if (left[i] > first) first = left[i];
    }
    for (size_t r = 0; r < n; ++r) {
        size_t p = r;
        for (size_t i = r + 1; i < n; ++i)
            if (left[i] > left[p]) p = i;
        if (!(left[p] > 1e-14 * first)) return r;
        if (p != r) {
            const size_t t = order[p];
            order[p] = order[r];
            order[r] = t;
            swap(left + p, left + r);
            for (size_t j = 0; j < n; ++j) swap(a + p * n + j, a + r * n + j);
            for (size_t i = r; i < n; ++i) swap(a + i * n + p, a + i * n + r);
        }
        const double root = sqrt(left[r]);
        a[r * n + r] = root;
        for (size_t i = r + 1; i < n; ++i) {
            const double entry = (a[i * n + r] - fw_dot(r, a + i * n, a + r * n)) / root;
            a[i * n + r] = entry;
            left[i] -= entry * entry;
        }
    }
    return n;
}

/* With a = l l^T, the eigenvalues are those of l^T l, and l takes its eigenvectors to those of a. */
size_t fw_small_range(size_t n, double *a, double *values, double *v)
{
    double inner[FW_SMALL_MOST * FW_SMALL_MOST], of_inner[FW_SMALL_MOST * FW_SMALL_MOST], left[FW_SMALL_MOST];
    size_t order[FW_SMALL_MOST];
    const size_t r = fw_small_pivoted(n, a, order, left);
    for (size_t i = 0; i < r * r; ++i) inner[i] = 0.0;
    for (size_t i = 0; i < n; ++i)
        for (size_t p = 0; p <= i && p < r; ++p) fw_axpy(p + 1, a[i * n + p], a + i * n, inner + p * r);
    for (size_t p = 0; p < r; ++p)
        for (size_t q = 0; q < p; ++q) inner[q * r + p] = inner[p * r + q];
    fw_small_eigen(r, inner, values, of_inner);
    for (size_t j = 0; j < r; ++j) {
        const double root = sqrt(values[j]);
        for (size_t i = 0; i < n; ++i)
            v[j * n + order[i]] = fw_dot(i < r ? i + 1 : r, a + i * n, of_inner + j * r) / root;
    }
    return r;
}

int fw_small_cholesky(size_t n, double *a)
{
    for (size_t j = 0; j < n; ++j) {
        const double pivot = a[j * n + j] - fw_dot(j, a + j * n, a + j * n);
        if (!(pivot > 0.0) || !isfinite(pivot)) return 0;
        const double root = sqrt(pivot);
        a[j * n + j] = root;
        for (size_t i = j + 1; i < n; ++i)
            a[i * n + j] = (a[i * n + j] - fw_dot(j, a + i * n, a + j * n)) / root;
    }
    return 1;
}

void fw_small_solve(size_t n, const double *l, size_t width, double *b)
{
    for (size_t i = n; i-- > 0;) {
        b[i] /= l[i * width + i];
        fw_axpy(i, -b[i], l + i * width, b);
    }
}
