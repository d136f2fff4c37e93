#include "small.h"

#include <math.h>

/* One Jacobi rotation that annihilates a[p][q]; Golub & Van Loan, Matrix Computations, section 8.5. */
static void rotate(size_t n, double *a, double *v, size_t p, size_t q)
{
    const double apq = a[p * n + q];
    const double theta = (a[q * n + q] - a[p * n + p]) / (2.0 * apq);
    const double t = (theta >= 0.0 ? 1.0 : -1.0) / (fabs(theta) + sqrt(theta * theta + 1.0));
    const double c = 1.0 / sqrt(t * t + 1.0), s = t * c;
    for (size_t i = 0; i < n; ++i) {
        const double ip = a[i * n + p], iq = a[i * n + q];
        a[i * n + p] = c * ip - s * iq;
        a[i * n + q] = s * ip + c * iq;
    }
    for (size_t i = 0; i < n; ++i) {
        const double pi = a[p * n + i], qi = a[q * n + i];
        a[p * n + i] = c * pi - s * qi;
        a[q * n + i] = s * pi + c * qi;
        const double vp = v[i * n + p], vq = v[i * n + q];
        v[i * n + p] = c * vp - s * vq;
        v[i * n + q] = s * vp + c * vq;
    }
    a[p * n + q] = a[q * n + p] = 0.0;
}

static void swap_columns(size_t n, double *v, size_t p, size_t q)
{
    for (size_t i = 0; i < n; ++i) {
        const double t = v[i * n + p];
        v[i * n + p] = v[i * n + q];
        v[i * n + q] = t;
    }
}

void fw_small_eigen(size_t n, double *a, double *values, double *v)
{
    for (size_t i = 0; i < n * n; ++i) v[i] = 0.0;
    for (size_t i = 0; i < n; ++i) v[i * n + i] = 1.0;
    for (int sweep = 0; sweep < 60; ++sweep) {
        int rotated = 0;
        for (size_t p = 0; p + 1 < n; ++p)
            for (size_t q = p + 1; q < n; ++q) {
                /* relative to both diagonal entries: small eigenvalues of graded matrices keep their digits */
                const double small = 1e-16 * sqrt(fabs(a[p * n + p])) * sqrt(fabs(a[q * n + q]));
                if (!(fabs(a[p * n + q]) > small)) continue;
                rotate(n, a, v, p, q);
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
        const double t = values[i];
        values[i] = values[largest];
        values[largest] = t;
        swap_columns(n, v, i, largest);
    }
}

/* a = l l^T with the largest diagonal entry left as each pivot (Golub & Van Loan, section 4.2.8); l is n x n, its first
 * r columns are used. */
static size_t pivoted(size_t n, double *a, double *l)
{
    double first = 0.0;
    for (size_t r = 0; r < n; ++r) {
        size_t p = 0;
        for (size_t i = 1; i < n; ++i)
            if (a[i * n + i] > a[p * n + p]) p = i;
        const double pivot = a[p * n + p];
        if (r == 0) first = pivot;
        if (!(pivot > 1e-14 * first)) return r;
        const double root = sqrt(pivot);
        for (size_t i = 0; i < n; ++i) l[i * n + r] = a[i * n + p] / root;
        for (size_t i = 0; i < n; ++i)
            for (size_t j = 0; j < n; ++j) a[i * n + j] -= l[i * n + r] * l[j * n + r];
        a[p * n + p] = 0.0;
    }
    return n;
}

/* With a = l l^T, the eigenvalues are those of l^T l, and l takes its eigenvectors to those of a. */
size_t fw_small_range(size_t n, double *a, double *values, double *v)
{
    double l[FW_SMALL_MOST * FW_SMALL_MOST], inner[FW_SMALL_MOST * FW_SMALL_MOST];
    const size_t r = pivoted(n, a, l);
    for (size_t p = 0; p < r; ++p)
        for (size_t q = 0; q <= p; ++q) {
            double sum = 0.0;
            for (size_t i = 0; i < n; ++i) sum += l[i * n + p] * l[i * n + q];
            a[p * r + q] = a[q * r + p] = sum;
        }
    fw_small_eigen(r, a, values, inner);
    for (size_t i = 0; i < n; ++i)
        for (size_t j = 0; j < r; ++j) {
            double sum = 0.0;
            for (size_t p = 0; p < r; ++p) sum += l[i * n + p] * inner[p * r + j];
            v[i * r + j] = sum / sqrt(values[j]);
        }
    return r;
}

int fw_small_cholesky(size_t n, double *a)
{
    for (size_t j = 0; j < n; ++j) {
        double pivot = a[j * n + j];
        for (size_t k = 0; k < j; ++k) pivot -= a[j * n + k] * a[j * n + k];
        if (!(pivot > 0.0) || !isfinite(pivot)) return 0;
        const double root = sqrt(pivot);
        a[j * n + j] = root;
        for (size_t i = j + 1; i < n; ++i) {
            double sum = a[i * n + j];
            for (size_t k = 0; k < j; ++k) sum -= a[i * n + k] * a[j * n + k];
            a[i * n + j] = sum / root;
        }
    }
    return 1;
}
