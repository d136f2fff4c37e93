#include "small.h"

#include <math.h>

#include "kernels.h"

static void swap(double *a, double *b)
{
    const double t = *a;
    *a = *b;
    *b = t;
}

/* Golub & Van Loan, section 4.2.8. Column r of l waits for its pivot, so a row of a holds l before it and a behind. */
size_t fw_small_pivoted(size_t n, double *a, double floor, size_t *order, double *left)
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
        if (!(left[p] > floor * first)) return r;
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

/* Rotates the r rows of v until they are orthogonal; their squared lengths. Jacobi from one side (Hestenes 1958), in rounds
 * of disjoint pairs, whose angles do not wait for each other. */
static void orthogonalise(size_t n, size_t r, double *v, double *square)
{
    const double small = 2.2e-16 * (double)n; /* what rounding leaves of a sum of n products */
    const size_t even = r + r % 2;
    for (int sweep = 0, rotated = 1; sweep < 60 && rotated; ++sweep) {
        rotated = 0;
        for (size_t j = 0; j < r; ++j) square[j] = fw_dot(n, v + j * n, v + j * n);
        for (size_t turn = 0; turn + 1 < even; ++turn) {
            size_t p[FW_SMALL_MOST / 2], q[FW_SMALL_MOST / 2], count = 0;
            double dot[FW_SMALL_MOST / 2], c[FW_SMALL_MOST / 2], s[FW_SMALL_MOST / 2];
            for (size_t i = 0; i < even / 2; ++i) { /* a tournament: the last stays, the others go round */
                const size_t one = i == 0 ? even - 1 : turn + i < even - 1 ? turn + i : turn + i - (even - 1);
                const size_t two = turn >= i ? turn - i : turn + (even - 1) - i;
                if (one >= r) continue;
                dot[count] = fw_dot(n, v + one * n, v + two * n);
                /* relative to both lengths: small ones keep their digits */
                if (!(fabs(dot[count]) > small * sqrt(square[one] * square[two]))) continue;
                p[count] = one;
                q[count++] = two;
            }
            for (size_t i = 0; i < count; ++i) { /* Golub & Van Loan, section 8.5 */
                const double theta = (square[q[i]] - square[p[i]]) / (2.0 * dot[i]);
                const double t = (theta >= 0.0 ? 1.0 : -1.0) / (fabs(theta) + sqrt(theta * theta + 1.0));
                c[i] = 1.0 / sqrt(t * t + 1.0);
                s[i] = t * c[i];
                square[p[i]] -= t * dot[i];
                square[q[i]] += t * dot[i];
            }
            for (size_t i = 0; i < count; ++i) fw_rotate(n, c[i], s[i], v + p[i] * n, v + q[i] * n);
            rotated |= count > 0;
        }
    }
}

/* With a = l l^T and l q of orthogonal columns, those are eigenvectors times roots of eigenvalues; after pivoting they are
 * almost that from the start (Veselic & Hari 1989). */
size_t fw_small_eigen(size_t n, double *a, double floor, double *values, double *v)
{
    double left[FW_SMALL_MOST];
    size_t order[FW_SMALL_MOST];
    const size_t r = fw_small_pivoted(n, a, floor, order, left);
    for (size_t j = 0; j < r; ++j)
        for (size_t i = 0; i < n; ++i) v[j * n + order[i]] = i < j ? 0.0 : a[i * n + j];
    orthogonalise(n, r, v, values);
    for (size_t j = 0; j < r; ++j) {
        size_t largest = j;
        for (size_t i = j + 1; i < r; ++i)
            if (values[i] > values[largest]) largest = i;
        if (largest != j) {
            swap(values + j, values + largest);
            for (size_t i = 0; i < n; ++i) swap(v + j * n + i, v + largest * n + i);
        }
        fw_scale(n, 1.0 / sqrt(values[j]), v + j * n);
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
