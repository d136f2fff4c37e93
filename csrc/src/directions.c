/* Learned directions of the base metric, from the draws and gradients of a window: the passes over the dimension.
 *
 * The rows are y = (x - mean)/sqrt(s) and c = (g - mean) sqrt(s) in coordinates scaled by s, and the directions known
 * before. What they show is looked for in few coordinates (window.c): their own where the dimension is small, else those
 * in an orthonormal basis of their span, which come from their Gram matrix. In large dimensions that matrix, the
 * directions found and the scale between them are all the passes there are.
 */
#include <math.h>
#include <string.h>

#include "chain.h"
#include "kernels.h"
#include "small.h"
#include "window.h"

#define WIDE FW_WINDOW_WIDE

/* Row i of 2m + k: draws, gradients, directions known before. */
static double *row(const fw_chain *chain, size_t m, size_t i)
{
    const size_t d = chain->walk.d;
    return i < m ? chain->rows_x + i * d : i < 2 * m ? chain->rows_g + (i - m) * d : chain->known + (i - 2 * m) * d;
}

/* What the rows are in few coordinates: number order[i] is row i of a lower triangle l, and the first win.q of those in
 * that order span all. Where the coordinates are few, l is not there. */
typedef struct view {
    fw_window win;
    size_t n, order[WIDE];
    double l[WIDE * WIDE];
} view;

/* The Gram matrix is l l^T, so the rows of l are what the vectors are in some orthonormal basis. */
static void look(const fw_chain *chain, view *at)
{
    fw_window *win = &at->win;
    const double *rows[WIDE];
    for (size_t i = 0; i < at->n; ++i) rows[i] = row(chain, win->m, i);
    win->q = chain->walk.d;
    if (win->q > WIDE) {
        double left[WIDE];
        fw_gram(chain->walk.d, at->n, rows, at->l);
        win->q = fw_small_pivoted(at->n, at->l, FW_SMALL_FLOOR, at->order, left);
        for (size_t i = 0; i < at->n; ++i) {
            rows[at->order[i]] = at->l + i * at->n;
            for (size_t j = i + 1; j < win->q; ++j) at->l[i * at->n + j] = 0.0;
        }
    }
    for (size_t i = 0; i < win->m; ++i) {
        win->y[i] = rows[i];
        win->c[i] = rows[win->m + i];
    }
    for (size_t i = 0; i < win->k; ++i) win->known[i] = rows[2 * win->m + i];
}

/* The directions found as vectors of d numbers, then orthonormal to rounding. */
static void build(const fw_chain *chain, const view *at, fw_shown *found, double *directions)
{
    const size_t d = chain->walk.d;
    for (size_t j = 0; j < found->count; ++j) {
        double *e = directions + j * d, *part = found->rows[j];
        if (d <= WIDE) {
            fw_copy(d, part, e);
        } else {
            fw_small_solve(at->win.q, at->l, at->n, part);
            memset(e, 0, d * sizeof *e);
            for (size_t i = 0; i < at->win.q; ++i) fw_axpy(d, part[i], row(chain, at->win.m, at->order[i]), e);
        }
        for (int twice = 0; twice < 2; ++twice)
            for (size_t i = 0; i < j; ++i)
                fw_axpy(d, -fw_dot(d, directions + i * d, e), directions + i * d, e);
        fw_scale(d, 1.0 / sqrt(fw_dot(d, e, e)), e);
    }
}

/* The rows from `first` on into coordinates of a scale larger by root^2. */
static void change_scale(fw_chain *chain, const view *at, size_t first, const double *root)
{
    const size_t d = chain->walk.d, m = at->win.m;
    for (size_t i = first; i < at->n; ++i) {
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
static void rescale(fw_chain *chain, const view *at, size_t k, const double *directions, double *scale)
{
    const size_t d = chain->walk.d, m = at->win.m;
    double *left_y = chain->end[0].x, *left_c = chain->end[0].w, *left = chain->end[0].c;
    double *mean_y = chain->end[1].x, *mean_c = chain->end[1].w;
    memset(left_y, 0, d * sizeof(double));
    memset(left_c, 0, d * sizeof(double));
    memset(mean_y, 0, d * sizeof(double));
    memset(mean_c, 0, d * sizeof(double));
    for (size_t i = 0; i < m; ++i)
        for (size_t part = 0; part < 2; ++part) {
            fw_copy(d, row(chain, m, i + part * m), left);
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
    change_scale(chain, at, 0, left);
}

/* Rows centred and scaled; the known directions from the scale before to this one. */
static void prepare(fw_chain *chain, const view *at, const double *scale)
{
    const fw_base *base = &chain->walk.base;
    const size_t d = chain->walk.d;
    double *root = chain->end[0].x, *inverse = chain->end[0].w;
    for (size_t i = 0; i < d; ++i) {
        root[i] = sqrt(scale[i]);
        inverse[i] = 1.0 / root[i];
    }
    for (size_t i = 0; i < at->win.m; ++i) {
        fw_centre(d, chain->mean_x, inverse, chain->rows_x + i * d);
        fw_centre(d, chain->mean_g, root, chain->rows_g + i * d);
    }
    if (base->k == 0) return;
    fw_copy(base->k * d, base->directions, chain->known);
    fw_divide_by(d, root, base->r, root);
    change_scale(chain, at, 2 * at->win.m, root);
}

size_t fw_find_directions(fw_chain *chain, double *scale, double *directions, double *lambda)
{
    const size_t d = chain->walk.d, m = (size_t)chain->learn.rows;
    const size_t most = chain->settings.rank < d ? chain->settings.rank : d - 1;
    if (m < 8 || most == 0) return 0;
    view at;
    fw_shown found;
    at.win.m = m;
    at.win.k = chain->walk.base.k;
    at.n = 2 * m + at.win.k;
    prepare(chain, &at, scale);
    for (int round = 0; round < 3; ++round) {
        look(chain, &at);
        fw_window_show(&at.win, most, chain->settings.rank_fixed, &found);
        if (found.count == 0) return 0;
        build(chain, &at, &found, directions);
        if (round < 2) rescale(chain, &at, found.count, directions, scale);
    }
    for (size_t j = 0; j < found.count; ++j) lambda[j] = exp(found.log_lambda[j]);
    return found.count;
}
