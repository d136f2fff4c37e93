/* Learned directions of the base metric, from the draws and gradients of a window.
 *
 * In coordinates scaled by s, y = (x - mean)/sqrt(s) and c = (g - mean) sqrt(s), look for the symmetric Sigma that
 * solves Sigma Cov(c) Sigma = Cov(y): the minimiser of the Fisher divergence (Seyboldt, Carlson & Carpenter 2026), and
 * for a normal target the covariance itself, from few draws, because gradients show stiff directions at once. It is
 * sought in the span of the leading right singular vectors of both and of the directions known before, so all algebra
 * happens in the Gram matrix of the rows; the dimension enters three times only: that Gram matrix, the directions
 * found, the scale between them.
 *
 * A window invents directions from its noise, so a direction must be found in one half and agree in the other.
 */
#include <math.h>
#include <string.h>

#include "chain.h"
#include "kernels.h"
#include "small.h"

#define ROWS FW_WINDOW_ROWS /* at most FW_SMALL_MOST */
#define SPAN 60                      /* dimensions of the span: fewer than rows, or covariances in it are singular */
#define WIDE (2 * ROWS + FW_MAX_DIRECTIONS) /* rows of the Gram matrix: y, c, directions known before */

static const double worth_keeping = 1.0; /* |log lambda|: a factor of e in variance */
static const double agreement = 0.5;     /* share of log lambda that the other half of the window must show */

/* The Gram matrix of a window: m rows y, m rows c, k directions known before; n = 2m + k. */
typedef struct window {
    size_t m, k, n, d;
    double w[WIDE * WIDE];
} window;

/* Up to FW_MAX_DIRECTIONS directions as combinations of the n rows, strongest first. */
typedef struct found {
    size_t count;
    double rows[FW_MAX_DIRECTIONS][WIDE];
    double log_lambda[FW_MAX_DIRECTIONS];
} found;

/* Leading right singular vectors of rows from..to-1 (counted in the Gram matrix w of order n), centred, as
 * combinations of the rows with unit length; returns how many. */
static size_t leading(const double *w, size_t n, size_t from, size_t to, size_t most, double out[][WIDE])
{
    const size_t m = to - from;
    double k[ROWS * ROWS], v[ROWS * ROWS], values[ROWS], mean[ROWS], whole = 0.0;
    for (size_t i = 0; i < m; ++i) {
        mean[i] = 0.0;
        for (size_t j = 0; j < m; ++j) mean[i] += w[(from + i) * n + from + j] / (double)m;
        whole += mean[i] / (double)m;
    }
    for (size_t i = 0; i < m; ++i)
        for (size_t j = 0; j < m; ++j) k[i * m + j] = w[(from + i) * n + from + j] - mean[i] - mean[j] + whole;
    const size_t r = fw_small_range(m, k, values, v);
    size_t count = 0;
    while (count < most && count < r && values[count] > 1e-10 * values[0] && values[count] > 0.0) {
        double sum = 0.0;
        memset(out[count], 0, sizeof out[count]);
        for (size_t i = 0; i < m; ++i) sum += v[i * r + count] / (double)m;
        for (size_t i = 0; i < m; ++i) out[count][from + i] = (v[i * r + count] - sum) / sqrt(values[count]);
        ++count;
    }
    return count;
}

/* product[i] = sum_j w[i][j] row[j] */
static void times(const double *w, size_t n, const double *row, double *product)
{
    for (size_t i = 0; i < n; ++i) product[i] = fw_dot(n, w + i * n, row);
}

/* Orthonormal basis of the span of `count` combinations, in place; nearly dependent parts are dropped. */
static size_t orthonormal(const double *w, size_t n, size_t count, double rows[][WIDE])
{
    double gram[SPAN * SPAN], v[SPAN * SPAN], values[SPAN], old[SPAN][WIDE], product[WIDE];
    for (size_t a = 0; a < count; ++a) {
        times(w, n, rows[a], product);
        for (size_t b = 0; b < count; ++b) gram[a * count + b] = fw_dot(n, product, rows[b]);
        memcpy(old[a], rows[a], sizeof old[a]);
    }
    for (size_t a = 0; a < count; ++a)
        for (size_t b = 0; b < a; ++b)
            gram[a * count + b] = gram[b * count + a] = 0.5 * (gram[a * count + b] + gram[b * count + a]);
    const size_t r = fw_small_range(count, gram, values, v);
    size_t kept = 0;
    for (; kept < r && values[kept] > 1e-6; ++kept) {
        memset(rows[kept], 0, sizeof rows[kept]);
        for (size_t a = 0; a < count; ++a) fw_axpy(n, v[a * r + kept] / sqrt(values[kept]), old[a], rows[kept]);
    }
    return kept;
}

/* Covariance (r x r) of the rows first..first+m-1 projected on the basis, with a ridge far below its size. */
static void covariance(const double *w, size_t n, size_t first, size_t m, size_t r, double basis[][WIDE], double *c)
{
    double t[SPAN][ROWS], product[WIDE];
    for (size_t a = 0; a < r; ++a) {
        double mean = 0.0;
        times(w, n, basis[a], product);
        for (size_t i = 0; i < m; ++i) mean += product[first + i] / (double)m;
        for (size_t i = 0; i < m; ++i) t[a][i] = product[first + i] - mean;
    }
    double trace = 0.0;
    for (size_t a = 0; a < r; ++a)
        for (size_t b = 0; b <= a; ++b) {
            c[a * r + b] = c[b * r + a] = fw_dot(m, t[a], t[b]) / (double)(m - 1);
            if (a == b) trace += c[a * r + a];
        }
    for (size_t a = 0; a < r; ++a) c[a * r + a] += 1e-13 * trace;
}

/* Sigma with Sigma cg Sigma = cx as l^-T (l^T cx l)^1/2 l^-1, cg = l l^T; both are destroyed, cx becomes Sigma. */
static int geometric_mean(size_t r, double *cx, double *cg)
{
    double m[SPAN * SPAN], v[SPAN * SPAN], values[SPAN];
    if (!fw_small_cholesky(r, cg)) return 0;
    for (size_t a = 0; a < r; ++a) /* m = cx l */
        for (size_t b = 0; b < r; ++b) {
            m[a * r + b] = 0.0;
            for (size_t k = b; k < r; ++k) m[a * r + b] += cx[a * r + k] * cg[k * r + b];
        }
    for (size_t a = 0; a < r; ++a) /* cx = l^T m */
        for (size_t b = 0; b < r; ++b) {
            cx[a * r + b] = 0.0;
            for (size_t k = a; k < r; ++k) cx[a * r + b] += cg[k * r + a] * m[k * r + b];
        }
    for (size_t a = 0; a < r; ++a)
        for (size_t b = 0; b < a; ++b) cx[a * r + b] = cx[b * r + a] = 0.5 * (cx[a * r + b] + cx[b * r + a]);
    fw_small_eigen(r, cx, values, v);
    for (size_t j = 0; j < r; ++j) { /* columns of v: l^-T v, scaled by the fourth root of the eigenvalue */
        const double root = sqrt(sqrt(values[j] > 0.0 ? values[j] : 0.0));
        for (size_t i = r; i-- > 0;) {
            double sum = v[i * r + j];
            for (size_t k = i + 1; k < r; ++k) sum -= cg[k * r + i] * v[k * r + j];
            v[i * r + j] = sum / cg[i * r + i];
        }
        for (size_t i = 0; i < r; ++i) v[i * r + j] *= root;
    }
    for (size_t a = 0; a < r; ++a)
        for (size_t b = 0; b < r; ++b) {
            cx[a * r + b] = 0.0;
            for (size_t j = 0; j < r; ++j) cx[a * r + b] += v[a * r + j] * v[b * r + j];
        }
    return 1;
}

/* Basis of the span in which rows from..to-1 are looked at; returns its dimension, fewer than there are rows. */
static size_t span(const window *win, size_t from, size_t to, double basis[][WIDE])
{
    const size_t rows = to - from;
    size_t r = 0, known = 0, side = win->d;
    if (win->d > rows / 2) {
        known = win->k + 4 < rows ? win->k : 0;
        side = (rows - 2 - known) / 3;
        if (side > (SPAN - known) / 2) side = (SPAN - known) / 2;
    }
    for (; r < known; ++r) {
        memset(basis[r], 0, sizeof basis[r]);
        basis[r][2 * win->m + r] = 1.0;
    }
    r += leading(win->w, win->n, from, to, side, basis + r);
    r += leading(win->w, win->n, win->m + from, win->m + to, side, basis + r);
    return orthonormal(win->w, win->n, r, basis);
}

/* Directions that the rows from..to-1 show by themselves, where |log lambda| reaches the threshold. */
static void estimate(const window *win, size_t from, size_t to, size_t most, double threshold, found *out)
{
    double basis[SPAN][WIDE], cx[SPAN * SPAN], cg[SPAN * SPAN], v[SPAN * SPAN], values[SPAN];
    out->count = 0;
    const size_t r = span(win, from, to, basis);
    if (r == 0) return;
    covariance(win->w, win->n, from, to - from, r, basis, cx);
    covariance(win->w, win->n, win->m + from, to - from, r, basis, cg);
    if (!geometric_mean(r, cx, cg)) return;
    fw_small_eigen(r, cx, values, v);
    /* strongest first: the values descend, so the strongest stands at one of the two ends */
    for (size_t low = 0, high = r; low < high && out->count < most;) {
        if (!(values[high - 1] > 0.0) || !isfinite(values[low])) return;
        const int take_low = fabs(log(values[low])) >= fabs(log(values[high - 1]));
        const size_t j = take_low ? low++ : --high;
        if (fabs(log(values[j])) < threshold) return;
        double *rows = out->rows[out->count];
        memset(rows, 0, sizeof out->rows[0]);
        for (size_t a = 0; a < r; ++a) fw_axpy(win->n, v[a * r + j], basis[a], rows);
        out->log_lambda[out->count++] = log(values[j]);
    }
}

/* log lambda of one direction as the rows from..to-1 alone show it. */
static double shown(const window *win, size_t from, size_t to, const double *rows)
{
    double product[WIDE], square[2] = {0.0, 0.0};
    times(win->w, win->n, rows, product);
    for (size_t part = 0; part < 2; ++part) {
        const double *t = product + part * win->m;
        double mean = 0.0;
        for (size_t i = from; i < to; ++i) mean += t[i] / (double)(to - from);
        for (size_t i = from; i < to; ++i) square[part] += (t[i] - mean) * (t[i] - mean);
    }
    return 0.5 * log(square[0] / square[1]);
}

/* How many directions of one half the other half agrees with. */
static size_t agreeing(const window *win, size_t most, int first)
{
    found half;
    const size_t middle = win->m / 2;
    estimate(win, first ? 0 : middle, first ? middle : win->m, most, worth_keeping, &half);
    size_t count = 0;
    for (size_t j = 0; j < half.count; ++j) {
        const double other = shown(win, first ? middle : 0, first ? win->m : middle, half.rows[j]);
        if (other * half.log_lambda[j] > 0.0 && fabs(other) > worth_keeping &&
            fabs(other) > agreement * fabs(half.log_lambda[j]))
            ++count;
    }
    return count;
}

/* ---- over the dimension ------------------------------------------------------------------------------------------- */

/* Row i of the Gram matrix as a vector. */
static double *row(const fw_chain *chain, size_t m, size_t i)
{
    const size_t d = chain->walk.d;
    return i < m ? chain->rows_x + i * d : i < 2 * m ? chain->rows_g + (i - m) * d : chain->known + (i - 2 * m) * d;
}

/* e_j = sum of rows, then orthonormal to rounding. */
static void build(fw_chain *chain, const window *win, const found *f, double *directions)
{
    const size_t d = win->d;
    for (size_t j = 0; j < f->count; ++j) {
        double *e = directions + j * d;
        memset(e, 0, d * sizeof *e);
        for (size_t i = 0; i < win->n; ++i) fw_axpy(d, f->rows[j][i], row(chain, win->m, i), e);
        for (int twice = 0; twice < 2; ++twice)
            for (size_t i = 0; i < j; ++i)
                fw_axpy(d, -fw_dot(d, directions + i * d, e), directions + i * d, e);
        fw_scale(d, 1.0 / sqrt(fw_dot(d, e, e)), e);
    }
}

/* Rows and known directions into coordinates of a scale larger by factor = root^2. */
static void change_scale(fw_chain *chain, const window *win, const double *root)
{
    const size_t d = win->d, m = win->m;
    for (size_t i = 0; i < win->n; ++i) {
        double *r = row(chain, m, i);
        const int like_gradient = (i >= m && i < 2 * m) || (i >= 2 * m && chain->walk.base.lambda[i - 2 * m] < 1.0);
        if (like_gradient)
            fw_scale_by(d, r, root, r);
        else
            fw_divide_by(d, r, root, r);
    }
}

/* The scale again, now that the directions explain their part: per coordinate the ratio of what is left of y to what
 * is left of c. */
static void rescale(fw_chain *chain, const window *win, size_t k, const double *directions, double *scale)
{
    const size_t d = win->d;
    double *left_y = chain->end[0].x, *left_c = chain->end[0].w, *left = chain->end[0].c;
    double *mean_y = chain->end[1].x, *mean_c = chain->end[1].w;
    memset(left_y, 0, d * sizeof(double));
    memset(left_c, 0, d * sizeof(double));
    memset(mean_y, 0, d * sizeof(double));
    memset(mean_c, 0, d * sizeof(double));
    for (size_t i = 0; i < win->m; ++i)
        for (size_t part = 0; part < 2; ++part) {
            fw_copy(d, row(chain, win->m, i + part * win->m), left);
            for (size_t j = 0; j < k; ++j)
                fw_axpy(d, -fw_dot(d, directions + j * d, left), directions + j * d, left);
            fw_gather(d, (double)(i + 1), left, part ? mean_c : mean_y, part ? left_c : left_y);
        }
    for (size_t i = 0; i < d; ++i) {
        const double root = left_y[i] / left_c[i];
        double factor = root * root;
        if (!(factor > 1e-6 && factor < 1e6)) factor = 1.0;
        scale[i] *= factor;
        left[i] = sqrt(factor);
    }
    change_scale(chain, win, left);
}

static void gram(const fw_chain *chain, window *win)
{
    const double *rows[WIDE];
    for (size_t i = 0; i < win->n; ++i) rows[i] = row(chain, win->m, i);
    fw_gram(win->d, win->n, rows, win->w);
}

/* Rows centred and scaled; the known directions from the old scale to this one. */
static void prepare(fw_chain *chain, const window *win, const double *scale)
{
    const fw_base *base = &chain->walk.base;
    const size_t d = win->d;
    double *root = chain->end[0].x;
    for (size_t i = 0; i < win->m; ++i) {
        fw_axpy(d, -1.0, chain->mean_x, chain->rows_x + i * d);
        fw_axpy(d, -1.0, chain->mean_g, chain->rows_g + i * d);
        fw_divide_by(d, chain->rows_x + i * d, base->r, chain->rows_x + i * d);
        fw_scale_by(d, chain->rows_g + i * d, base->r, chain->rows_g + i * d);
    }
    fw_copy(base->k * d, base->directions, chain->known);
    for (size_t i = 0; i < d; ++i) root[i] = sqrt(scale[i]) / base->r[i];
    change_scale(chain, win, root);
}

size_t fw_find_directions(fw_chain *chain, double *scale, double *directions, double *lambda)
{
    const size_t d = chain->walk.d, m = (size_t)chain->learn.rows;
    const size_t most = chain->settings.rank < d ? chain->settings.rank : d - 1;
    if (m < 8 || most == 0) return 0;
    window win = {.m = m, .k = chain->walk.base.k, .n = 2 * m + chain->walk.base.k, .d = d};
    found whole;
    prepare(chain, &win, scale);
    for (int round = 0; round < 3; ++round) {
        gram(chain, &win);
        size_t allowed = most;
        if (!chain->settings.rank_fixed) {
            const size_t a = agreeing(&win, most, 1), b = agreeing(&win, most, 0);
            allowed = a < b ? a : b;
        }
        estimate(&win, 0, m, allowed, chain->settings.rank_fixed ? 0.0 : worth_keeping, &whole);
        if (whole.count == 0) return 0;
        build(chain, &win, &whole, directions);
        if (round < 2) rescale(chain, &win, whole.count, directions, scale);
    }
    for (size_t j = 0; j < whole.count; ++j) lambda[j] = exp(whole.log_lambda[j]);
    return whole.count;
}
