/* In scaled coordinates, look for the symmetric Sigma that solves Sigma Cov(c) Sigma = Cov(y): the minimiser of the Fisher
 * divergence (Seyboldt, Carlson & Carpenter 2026), and for a normal target the covariance itself, from few draws, because
 * gradients show stiff directions at once. Where the rows are many it is sought in all coordinates, else in the span of
 * the leading right singular vectors of both and of the directions known before.
 *
 * A window invents directions from its noise, so a direction must be found in one half and agree in the other.
 *
 * Most windows show none, and that is seen without an eigenvalue. Sigma e = lambda e gives
 * e'Cov(y)e = lambda^2 e'Cov(c)e; so where e^2t Cov(c) - Cov(y) and e^2t Cov(y) - Cov(c) are both positive definite, no
 * |log lambda| reaches t, in all coordinates or in any span.
 */
#include "window.h"

#include <math.h>
#include <string.h>

#include "kernels.h"
#include "small.h"

#define ROWS FW_WINDOW_ROWS /* at most FW_SMALL_MOST */
#define SPAN 60             /* dimensions of the span: fewer than rows, or covariances in it are singular */
typedef double fw_basis[ROWS][FW_WINDOW_WIDE]; /* two sets of vectors, of at most SPAN / 2 or ROWS / 2, before one is made of them */

static const double worth_keeping = 1.0; /* |log lambda|: a factor of e in variance */
static const double agreement = 0.5;     /* share of log lambda that the other half of the window must show */

/* ---- the span ------------------------------------------------------------------------------------------------------ */

/* Leading right singular vectors of m centred rows of q numbers; returns how many. */
static size_t leading(size_t m, size_t q, const double *const *rows, size_t most, double out[][FW_WINDOW_WIDE])
{
    double k[ROWS * ROWS], v[ROWS * ROWS], values[ROWS], mean[ROWS], whole = 0.0;
    fw_gram(q, m, rows, k);
    for (size_t i = 0; i < m; ++i) {
        mean[i] = 0.0;
        for (size_t j = 0; j < m; ++j) mean[i] += k[i * m + j] / (double)m;
        whole += mean[i] / (double)m;
    }
    for (size_t i = 0; i < m; ++i)
        for (size_t j = 0; j < m; ++j) k[i * m + j] += whole - mean[i] - mean[j];
    const size_t r = fw_small_eigen(m, k, FW_SMALL_FLOOR, values, v);
    size_t count = 0;
    while (count < most && count < r && values[count] > 1e-10 * values[0] && values[count] > 0.0) {
        const double *u = v + count * m;
        double sum = 0.0;
        memset(out[count], 0, q * sizeof(double));
        for (size_t i = 0; i < m; ++i) sum += u[i] / (double)m;
        for (size_t i = 0; i < m; ++i) fw_axpy(q, (u[i] - sum) / sqrt(values[count]), rows[i], out[count]);
        ++count;
    }
    return count;
}

/* Orthonormal basis of the span of `count` vectors, in place; nearly dependent parts are dropped. */
static size_t orthonormal(size_t q, size_t count, fw_basis basis)
{
    double gram[ROWS * ROWS], v[ROWS * ROWS], values[ROWS];
    fw_basis old;
    const double *rows[ROWS];
    for (size_t a = 0; a < count; ++a) {
        memcpy(old[a], basis[a], q * sizeof(double));
        rows[a] = old[a];
    }
    fw_gram(q, count, rows, gram);
    const size_t r = fw_small_eigen(count, gram, FW_SMALL_FLOOR, values, v);
    size_t kept = 0;
    for (; kept < r && values[kept] > 1e-6; ++kept) {
        memset(basis[kept], 0, q * sizeof(double));
        for (size_t a = 0; a < count; ++a) fw_axpy(q, v[kept * count + a] / sqrt(values[kept]), old[a], basis[kept]);
    }
    return kept;
}

/* Basis of the span in which rows from..to-1 are looked at; returns its dimension, fewer than there are rows. */
static size_t span(const fw_window *win, size_t from, size_t to, fw_basis basis)
{
    const size_t rows = to - from;
    size_t r = 0, known = 0, side = win->q;
    if (win->q > rows / 2) {
        known = win->k + 4 < rows ? win->k : 0;
        side = (rows - 2 - known) / 3;
        if (side > (SPAN - known) / 2) side = (SPAN - known) / 2;
    }
    for (; r < known; ++r) memcpy(basis[r], win->known[r], win->q * sizeof(double));
    r += leading(rows, win->q, win->y + from, side, basis + r);
    r += leading(rows, win->q, win->c + from, side, basis + r);
    return orthonormal(win->q, r, basis);
}

/* ---- Sigma --------------------------------------------------------------------------------------------------------- */

/* Covariance (r x r) of m rows projected on the basis (NULL: all coordinates), with a ridge far below its size. */
static void covariance(size_t m, const double *const *rows, size_t q, size_t r, fw_basis basis, double *c)
{
    double t[SPAN][ROWS];
    const double *columns[SPAN];
    for (size_t a = 0; a < SPAN; ++a) columns[a] = t[a];
    for (size_t a = 0; a < r; ++a) {
        double mean = 0.0;
        for (size_t i = 0; i < m; ++i) {
            t[a][i] = basis ? fw_dot(q, basis[a], rows[i]) : rows[i][a];
            mean += t[a][i];
        }
        mean /= (double)m;
        for (size_t i = 0; i < m; ++i) t[a][i] -= mean;
    }
    fw_gram(m, r, columns, c);
    fw_scale(r * r, 1.0 / (double)(m - 1), c);
    double trace = 0.0;
    for (size_t a = 0; a < r; ++a) trace += c[a * r + a];
    for (size_t a = 0; a < r; ++a) c[a * r + a] += 1e-13 * trace;
}

/* Is factor a - b positive definite? */
static int exceeds(size_t r, double factor, const double *a, const double *b)
{
    double difference[SPAN * SPAN];
    for (size_t i = 0; i < r * r; ++i) difference[i] = factor * a[i] - b[i];
    return fw_small_cholesky(r, difference);
}

/* No |log lambda| of these covariances reaches the threshold: see above. */
static int shows_nothing(size_t r, const double *cx, const double *cg, double threshold)
{
    const double factor = exp(2.0 * threshold);
    return exceeds(r, factor, cg, cx) && exceeds(r, factor, cx, cg);
}

/* Have the rows any extent in every direction? Then 2e-10 of the traces is below all of them (leading() drops less). */
static int full(size_t r, const double *cx, const double *cg)
{
    double sum[SPAN * SPAN], of_x = 0.0, of_g = 0.0;
    for (size_t a = 0; a < r; ++a) {
        of_x += cx[a * r + a];
        of_g += cg[a * r + a];
    }
    for (size_t i = 0; i < r * r; ++i) sum[i] = cx[i] / of_x + cg[i] / of_g;
    for (size_t a = 0; a < r; ++a) sum[a * r + a] -= 2.1e-10;
    return fw_small_cholesky(r, sum);
}

/* Sigma with Sigma cg Sigma = cx as l^-T (l^T cx l)^1/2 l^-1, cg = l l^T; both are destroyed, cx becomes Sigma. */
static int geometric_mean(size_t r, double *cx, double *cg)
{
    double m[SPAN * SPAN], v[SPAN * SPAN], values[SPAN];
    if (!fw_small_cholesky(r, cg)) return 0;
    memset(m, 0, r * r * sizeof *m);
    for (size_t a = 0; a < r; ++a) /* m = cx l */
        for (size_t k = 0; k < r; ++k) fw_axpy(k + 1, cx[a * r + k], cg + k * r, m + a * r);
    memset(cx, 0, r * r * sizeof *cx);
    for (size_t a = 0; a < r; ++a) { /* cx = l^T m */
        for (size_t k = a; k < r; ++k) fw_axpy(a + 1, cg[k * r + a], m + k * r, cx + a * r);
        for (size_t b = 0; b < a; ++b) cx[b * r + a] = cx[a * r + b];
    }
    const size_t rank = fw_small_eigen(r, cx, 0.0, values, v);
    memset(cx, 0, r * r * sizeof *cx);
    for (size_t j = 0; j < rank; ++j) { /* l^-T v, scaled by the fourth root of the eigenvalue, with itself */
        double *u = v + j * r;
        fw_small_solve(r, cg, r, u);
        fw_scale(r, sqrt(sqrt(values[j])), u);
        for (size_t a = 0; a < r; ++a) fw_axpy(a + 1, u[a], u, cx + a * r);
    }
    for (size_t a = 0; a < r; ++a)
        for (size_t b = 0; b < a; ++b) cx[b * r + a] = cx[a * r + b];
    return 1;
}

/* No |log| of an eigenvalue of sigma reaches the threshold. */
static int is_near_one(size_t r, const double *sigma, double threshold)
{
    double difference[SPAN * SPAN];
    for (int above = 0; above < 2; ++above) {
        const double edge = exp(above ? threshold : -threshold), sign = above ? -1.0 : 1.0;
        for (size_t i = 0; i < r * r; ++i) difference[i] = sign * sigma[i];
        for (size_t a = 0; a < r; ++a) difference[a * r + a] -= sign * edge;
        if (!fw_small_cholesky(r, difference)) return 0;
    }
    return 1;
}

/* Eigenvectors of sigma in the basis, strongest first, down to the threshold. */
static void strongest(const fw_window *win, size_t r, double *sigma, fw_basis basis, size_t most, double threshold,
                      fw_shown *out)
{
    double v[SPAN * SPAN], values[SPAN];
    if (fw_small_eigen(r, sigma, 0.0, values, v) < r) return;
    /* the values descend, so the strongest stands at one of the two ends */
    for (size_t low = 0, high = r; low < high && out->count < most;) {
        if (!(values[high - 1] > 0.0) || !isfinite(values[low])) return;
        const int take_low = fabs(log(values[low])) >= fabs(log(values[high - 1]));
        const size_t j = take_low ? low++ : --high;
        if (fabs(log(values[j])) < threshold) return;
        double *row = out->rows[out->count];
        if (basis) {
            memset(row, 0, win->q * sizeof *row);
            for (size_t a = 0; a < r; ++a) fw_axpy(win->q, v[j * r + a], basis[a], row);
        } else {
            memcpy(row, v + j * r, r * sizeof *row);
        }
        out->log_lambda[out->count++] = log(values[j]);
    }
}

/* Directions that the rows from..to-1 show by themselves, where |log lambda| reaches the threshold. */
static void estimate(const fw_window *win, size_t from, size_t to, size_t most, double threshold, fw_shown *out)
{
    double cx[SPAN * SPAN], cg[SPAN * SPAN];
    fw_basis basis;
    const size_t rows = to - from, q = win->q;
    size_t r = q;
    int whole = 0;
    out->count = 0;
    if (q <= SPAN) {
        covariance(rows, win->y + from, q, q, NULL, cx);
        covariance(rows, win->c + from, q, q, NULL, cg);
        if (shows_nothing(q, cx, cg, threshold)) return;
        whole = q <= rows / 2 && full(q, cx, cg);
    }
    if (!whole) {
        r = span(win, from, to, basis);
        if (r == 0) return;
        covariance(rows, win->y + from, q, r, basis, cx);
        covariance(rows, win->c + from, q, r, basis, cg);
        if (shows_nothing(r, cx, cg, threshold)) return;
    }
    if (geometric_mean(r, cx, cg) && !is_near_one(r, cx, threshold))
        strongest(win, r, cx, whole ? NULL : basis, most, threshold, out);
}

/* ---- two halves ---------------------------------------------------------------------------------------------------- */

/* log lambda of one direction as the rows from..to-1 alone show it. */
static double seen(const fw_window *win, size_t from, size_t to, const double *direction)
{
    double square[2] = {0.0, 0.0};
    for (size_t part = 0; part < 2; ++part) {
        const double *const *rows = part ? win->c : win->y;
        double t[ROWS], mean = 0.0;
        for (size_t i = from; i < to; ++i) {
            t[i] = fw_dot(win->q, rows[i], direction);
            mean += t[i] / (double)(to - from);
        }
        for (size_t i = from; i < to; ++i) square[part] += (t[i] - mean) * (t[i] - mean);
    }
    return 0.5 * log(square[0] / square[1]);
}

/* How many directions of one half the other half agrees with. */
static size_t agreeing(const fw_window *win, size_t most, int first)
{
    fw_shown half;
    const size_t middle = win->m / 2;
    estimate(win, first ? 0 : middle, first ? middle : win->m, most, worth_keeping, &half);
    size_t count = 0;
    for (size_t j = 0; j < half.count; ++j) {
        const double other = seen(win, first ? middle : 0, first ? win->m : middle, half.rows[j]);
        if (other * half.log_lambda[j] > 0.0 && fabs(other) > worth_keeping &&
            fabs(other) > agreement * fabs(half.log_lambda[j]))
            ++count;
    }
    return count;
}

void fw_window_show(const fw_window *win, size_t most, int fixed, fw_shown *out)
{
    size_t allowed = most;
    out->count = 0;
    for (int first = 1; first >= 0 && !fixed && allowed > 0; --first) {
        const size_t count = agreeing(win, most, first);
        if (count < allowed) allowed = count;
    }
    if (allowed > 0) estimate(win, 0, win->m, allowed, fixed ? 0.0 : worth_keeping, out);
}
