/* Maps whose coordinates move together: shares that sum to one, increasing sequences.
 *
 * Shares: y -> z = V y -> x = softmax(z), with V the Helmert basis: column k (from 1) is c_k (1, ..., 1, -k, 0, ...),
 * k ones and c_k = 1 / sqrt(k (k + 1)). Products with V and V^T are running sums. */
#include <float.h>
#include <math.h>
#include <string.h>

#include "maps.h"

/* Helmert basis: z (n) = V y (n - 1), and out (n - 1) = V^T t (n). */
static void spread(size_t n, const double *y, double *z)
{
    double tail = 0.0;
    z[n - 1] = 0.0;
    for (size_t k = n - 1; k > 0; --k) {
        const double c = 1.0 / sqrt((double)k * (double)(k + 1)), t = c * y[k - 1];
        z[k] = tail - (double)k * t;
        tail += t;
    }
    z[0] = tail;
}

static void gather(size_t n, const double *t, double *out)
{
    double head = 0.0;
    for (size_t k = 1; k < n; ++k) {
        head += t[k - 1];
        out[k - 1] = (head - (double)k * t[k]) / sqrt((double)k * (double)(k + 1));
    }
}

/* log of the Jacobian determinant of the first n - 1 shares: sum log x + log(n) / 2, and sum z = 0. */
static double shares_apply(size_t n, const double *y, double *x)
{
    spread(n, y, x);
    double top = x[0], sum = 0.0;
    for (size_t i = 1; i < n; ++i) top = x[i] > top ? x[i] : top;
    for (size_t i = 0; i < n; ++i) {
        x[i] = exp(x[i] - top);
        sum += x[i];
    }
    for (size_t i = 0; i < n; ++i) {
        const double share = x[i] / sum;
        x[i] = share < DBL_MIN ? fmax(share, 0x1p-1074) : share < 1.0 ? share : 1.0 - 0.5 * DBL_EPSILON;
    }
    return -(double)n * (top + log(sum)) + 0.5 * log((double)n);
}

/* t_i = x_i (g_i - x.g) + [1 - n x_i], then V^T t; work holds n numbers. */
static void shares_pull(size_t n, const double *x, const double *g, int with_jacobian, double *work, double *out)
{
    double sum = 0.0;
    for (size_t i = 0; i < n; ++i) {
        work[i] = x[i] * g[i];
        sum += work[i];
    }
    const double all = sum + (with_jacobian ? (double)n : 0.0);
    for (size_t i = 0; i < n; ++i) work[i] -= x[i] * all;
    gather(n, work, out); /* the 1 of each entry is orthogonal to V */
}

/* out = dx along p; work may be out. */
static void shares_push(size_t n, const double *x, const double *p, double *out)
{
    spread(n, p, out);
    double mean = 0.0;
    for (size_t i = 0; i < n; ++i) mean += x[i] * out[i];
    for (size_t i = 0; i < n; ++i) out[i] = x[i] * (out[i] - mean);
}

/* out += derivative along p of shares_pull with g held; work holds 3 n numbers. */
static void shares_bend(size_t n, const double *x, const double *g, const double *p, double *work, double *out)
{
    double *moved = work, *t = work + n, *bent = work + 2 * n;
    double sum = 0.0, moved_sum = 0.0;
    shares_push(n, x, p, moved);
    for (size_t i = 0; i < n; ++i) {
        sum += x[i] * g[i];
        moved_sum += moved[i] * g[i];
    }
    for (size_t i = 0; i < n; ++i) t[i] = moved[i] * (g[i] - (sum + (double)n)) - x[i] * moved_sum;
    gather(n, t, bent);
    for (size_t i = 0; i + 1 < n; ++i) out[i] += bent[i];
}

static void shares_invert(size_t n, const double *x, double *work, double *y)
{
    for (size_t i = 0; i < n; ++i) work[i] = x[i] > 0.0 && x[i] < 1.0 ? log(x[i]) : NAN;
    gather(n, work, y);
}

/* ---- increasing: scratch holds exp(y) (n), or the n + 1 gaps as shares and 4 (n + 1) of work ------------------------ */

static int two_sided(const fw_block *b)
{
    return b->low >= -DBL_MAX && b->high <= DBL_MAX;
}

/* (high - low) times a share, also where the difference overflows. */
static double wide(const fw_block *b, double share)
{
    const double width = b->high - b->low;
    return width <= DBL_MAX ? width * share : 2.0 * ((0.5 * b->high - 0.5 * b->low) * share);
}

static double log_wide(const fw_block *b)
{
    const double width = b->high - b->low;
    return width <= DBL_MAX ? log(width) : log(0.5 * b->high - 0.5 * b->low) + log(2.0);
}

static int downwards(const fw_block *b)
{
    return b->high <= DBL_MAX && !(b->low >= -DBL_MAX);
}

static int anchored(const fw_block *b)
{
    return b->low >= -DBL_MAX || b->high <= DBL_MAX;
}

/* Rounding must not make two values equal, nor put one on a bound. */
static void separate(const fw_block *b, double *x)
{
    const size_t n = b->size;
    double before = b->low;
    for (size_t k = 0; k < n; ++k) {
        if (!(x[k] > before)) x[k] = nextafter(before, INFINITY);
        before = x[k];
    }
    double after = b->high;
    for (size_t k = n; k > 0; --k) {
        if (!(x[k - 1] < after)) x[k - 1] = nextafter(after, -INFINITY);
        after = x[k - 1];
    }
    for (size_t k = 0; k < n; ++k) x[k] = x[k] < b->low ? b->low : x[k];
}

static double gaps_apply(const fw_block *b, const double *y, double *x)
{
    const size_t n = b->size;
    double *gap = b->scratch;
    const double log_jacobian = shares_apply(n + 1, y, gap);
    double sum = 0.0;
    for (size_t k = 0; k < n; ++k) {
        sum += gap[k];
        x[k] = b->low + wide(b, sum);
    }
    /* The upper half from the upper bound, where it keeps its digits. */
    sum = 0.0;
    for (size_t k = n; k > 0; --k) {
        sum += gap[k];
        if (sum < 0.5) x[k - 1] = b->high - wide(b, sum);
    }
    return log_jacobian + (double)n * log_wide(b);
}

static double increasing_apply(const fw_block *b, const double *y, double *x)
{
    const size_t n = b->size;
    double *e = b->scratch, total = 0.0;
    if (two_sided(b)) {
        total = gaps_apply(b, y, x);
    } else {
        for (size_t k = 0; k < n; ++k) {
            e[k] = exp(y[k]);
            total += y[k];
        }
        if (!anchored(b)) {
            e[0] = 1.0;
            total -= y[0];
        }
        if (downwards(b)) {
            double at = b->high;
            for (size_t k = n; k > 0; --k) x[k - 1] = at -= e[k - 1];
        } else {
            double at = x[0] = anchored(b) ? b->low + e[0] : y[0];
            for (size_t k = 1; k < n; ++k) x[k] = at += e[k];
        }
    }
    separate(b, x);
    return total;
}

/* Sums from k to the end (from the start when downwards) of g, times the sign of dx/dy, into sums. */
static void later_sums(const fw_block *b, const double *g, double *sums)
{
    const size_t n = b->size;
    double sum = 0.0;
    if (downwards(b))
        for (size_t k = 0; k < n; ++k) sums[k] = -(sum += g[k]);
    else
        for (size_t k = n; k > 0; --k) sums[k - 1] = sum += g[k - 1];
}

/* Gradient of the values as a gradient of the gaps: x_k = low + width sum_{j <= k} gap_j. */
static void gap_gradient(const fw_block *b, const double *g, double *out)
{
    const size_t n = b->size;
    double sum = 0.0;
    out[n] = 0.0;
    for (size_t k = n; k > 0; --k) {
        sum += g[k - 1];
        out[k - 1] = wide(b, sum);
    }
}

static void increasing_pull(const fw_block *b, const double *g, int with_jacobian, double *out)
{
    const size_t n = b->size;
    double *work = b->scratch + n + 1;
    if (two_sided(b)) {
        gap_gradient(b, g, work);
        shares_pull(n + 1, b->scratch, work, with_jacobian, work + n + 1, out);
        return;
    }
    later_sums(b, g, out);
    for (size_t k = 0; k < n; ++k) {
        const int exponent = k > 0 || anchored(b);
        out[k] = out[k] * b->scratch[k] + (with_jacobian && exponent ? 1.0 : 0.0);
    }
}

static void increasing_push(const fw_block *b, const double *p, double *out)
{
    const size_t n = b->size;
    double sum = 0.0;
    if (two_sided(b)) {
        double *work = b->scratch + n + 1;
        shares_push(n + 1, b->scratch, p, work);
        for (size_t k = 0; k < n; ++k) {
            sum += work[k];
            out[k] = wide(b, sum);
        }
    } else if (downwards(b)) {
        for (size_t k = n; k > 0; --k) out[k - 1] = sum -= b->scratch[k - 1] * p[k - 1];
    } else {
        for (size_t k = 0; k < n; ++k) out[k] = sum += b->scratch[k] * p[k];
    }
}

static void increasing_bend(const fw_block *b, const double *g, const double *p, double *out)
{
    const size_t n = b->size;
    double *work = b->scratch + n + 1;
    if (two_sided(b)) {
        gap_gradient(b, g, work);
        shares_bend(n + 1, b->scratch, work, p, work + n + 1, out);
        return;
    }
    later_sums(b, g, work);
    for (size_t k = 0; k < n; ++k)
        if (k > 0 || anchored(b)) out[k] += work[k] * b->scratch[k] * p[k];
}

static void increasing_invert(const fw_block *b, const double *x, double *y)
{
    const size_t n = b->size;
    if (two_sided(b)) {
        double *gap = b->scratch + n + 1;
        for (size_t k = 0; k <= n; ++k) {
            const double from = k == 0 ? b->low : x[k - 1], to = k == n ? b->high : x[k];
            const double gap_k = to - from; /* overflows only where the width does */
            gap[k] = !(to > from) ? NAN : gap_k <= DBL_MAX ? log(gap_k) : log(0.5 * to - 0.5 * from) + log(2.0);
        }
        gather(n + 1, gap, y);
    } else if (downwards(b)) {
        for (size_t k = 0; k < n; ++k) y[k] = log((k + 1 < n ? x[k + 1] : b->high) - x[k]);
    } else {
        for (size_t k = 1; k < n; ++k) y[k] = log(x[k] - x[k - 1]);
        y[0] = anchored(b) ? log(x[0] - b->low) : x[0];
    }
}

/* ---- by kind ------------------------------------------------------------------------------------------------------ */

size_t fw_joint_scratch(const fw_block *b)
{
    if (b->kind == FW_SHARES) return 4 * b->size;
    if (b->kind == FW_INCREASING) return 5 * (b->size + 1);
    return b->kind == FW_CORRELATION ? fw_correlation_scratch(b->size) : 0;
}

double fw_joint_apply(const fw_block *b, const double *y, double *x)
{
    if (b->kind == FW_CORRELATION) return fw_correlation_apply(b->size, b->scratch, y, x);
    if (b->kind == FW_INCREASING) return increasing_apply(b, y, x);
    const double log_jacobian = shares_apply(b->size, y, x);
    memcpy(b->scratch, x, b->size * sizeof *x);
    return log_jacobian;
}

void fw_joint_pull(const fw_block *b, const double *g, int with_jacobian, double *out)
{
    if (b->kind == FW_CORRELATION) fw_correlation_pull(b->size, b->scratch, g, with_jacobian, out);
    else if (b->kind == FW_INCREASING) increasing_pull(b, g, with_jacobian, out);
    else shares_pull(b->size, b->scratch, g, with_jacobian, b->scratch + b->size, out);
}

void fw_joint_push(const fw_block *b, const double *p, double *out)
{
    if (b->kind == FW_CORRELATION) fw_correlation_push(b->size, b->scratch, p, out);
    else if (b->kind == FW_INCREASING) increasing_push(b, p, out);
    else shares_push(b->size, b->scratch, p, out);
}

void fw_joint_bend(const fw_block *b, const double *g, const double *p, double *out)
{
    if (b->kind == FW_CORRELATION) fw_correlation_bend(b->size, b->scratch, g, p, out);
    else if (b->kind == FW_INCREASING) increasing_bend(b, g, p, out);
    else shares_bend(b->size, b->scratch, g, p, b->scratch + b->size, out);
}

void fw_joint_invert(const fw_block *b, const double *x, double *y)
{
    if (b->kind == FW_CORRELATION) fw_correlation_invert(b->size, b->scratch, x, y);
    else if (b->kind == FW_INCREASING) increasing_invert(b, x, y);
    else shares_invert(b->size, x, b->scratch + b->size, y);
}
