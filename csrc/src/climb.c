/* The climb: how settling leaves a start that lies far below the bulk of the target.
 *
 * Nothing adapts well where the log density changes by thousands along one path, so settling begins with iterations
 * of the limited-memory BFGS method (Nocedal & Wright, Numerical Optimization, algorithm 7.4) on the log density. It
 * must not run on to a mode, which may be an infinitely narrow neck: a normal target of dimension d has no more than
 * about d/2 between its bulk and its mode, so a look every few iterations lets the climb go on only while it gains far
 * more than that, and what did not gain so much is undone. The points passed give the first scale.
 */
#include <math.h>
#include <string.h>

#include "chain.h"
#include "kernels.h"

#define MEMORY FW_CLIMB_ROWS

static const uint64_t look = 4, most_iterations = 400;

static double least_gain(const fw_chain *chain) { return (double)chain->walk.d + 10.0; }

static double *row_x(const fw_chain *chain, uint64_t i) { return chain->rows_x + i % MEMORY * chain->walk.d; }
static double *row_g(const fw_chain *chain, uint64_t i) { return chain->rows_g + i % MEMORY * chain->walk.d; }

static void remember(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    fw_copy(chain->walk.d, chain->x, row_x(chain, learn->climbed));
    fw_copy(chain->walk.d, chain->g, row_g(chain, learn->climbed));
    learn->climb_value[learn->climbed % MEMORY] = chain->value;
}

/* The two-loop recursion over the steps between remembered points; p becomes the direction of ascent. */
static void direction(const fw_chain *chain, double *p, double *dx, double *dg)
{
    const size_t d = chain->walk.d;
    const uint64_t now = chain->learn.climbed;
    const uint64_t oldest = now < MEMORY - 1 ? 0 : now - (MEMORY - 1);
    const double *r = chain->walk.base.r;
    double a[MEMORY], rho[MEMORY], gamma = 1.0;
    int scaled = 0;
    fw_copy(d, chain->g, p);
    for (uint64_t i = now; i > oldest; --i) {
        fw_difference(d, row_x(chain, i), row_x(chain, i - 1), dx);
        fw_difference(d, row_g(chain, i - 1), row_g(chain, i), dg);
        const double curvature = fw_dot(d, dx, dg);
        a[i % MEMORY] = rho[i % MEMORY] = 0.0;
        if (!(curvature > 0.0) || !isfinite(1.0 / curvature)) continue;
        rho[i % MEMORY] = 1.0 / curvature;
        a[i % MEMORY] = rho[i % MEMORY] * fw_dot(d, dx, p);
        fw_axpy(d, -a[i % MEMORY], dg, p);
        if (!scaled) {
            fw_scale_by(d, r, dg, dg);
            gamma = curvature / fw_dot(d, dg, dg);
            scaled = 1;
        }
    }
    fw_scale_by(d, r, p, p);
    fw_scale_by(d, r, p, p);
    fw_scale(d, gamma, p);
    for (uint64_t i = oldest + 1; i <= now; ++i) {
        if (!(rho[i % MEMORY] > 0.0)) continue;
        fw_difference(d, row_x(chain, i), row_x(chain, i - 1), dx);
        fw_difference(d, row_g(chain, i - 1), row_g(chain, i), dg);
        fw_axpy(d, a[i % MEMORY] - rho[i % MEMORY] * fw_dot(d, dg, p), dx, p);
    }
}

/* First scale from the points passed: the ratio of movement in x to movement in g, coordinate by coordinate. */
static void scale_from_climb(fw_chain *chain)
{
    const size_t d = chain->walk.d;
    const uint64_t now = chain->learn.climbed;
    const uint64_t oldest = now < MEMORY - 1 ? 0 : now - (MEMORY - 1);
    double *sum_x = chain->end[0].x, *sum_g = chain->end[0].w, *step = chain->end[0].c;
    if (now == oldest) return;
    memset(sum_x, 0, d * sizeof *sum_x);
    memset(sum_g, 0, d * sizeof *sum_g);
    for (uint64_t i = oldest + 1; i <= now; ++i) {
        fw_difference(d, row_x(chain, i), row_x(chain, i - 1), step);
        fw_add_squares(d, step, sum_x);
        fw_difference(d, row_g(chain, i), row_g(chain, i - 1), step);
        fw_add_squares(d, step, sum_g);
    }
    for (size_t i = 0; i < d; ++i) {
        const double s = sqrt(sum_x[i] / sum_g[i]), r = chain->walk.base.r[i];
        step[i] = s > 1e-200 && s < 1e200 ? s : r * r;
    }
    fw_base_set(&chain->walk.base, step, 0, NULL, NULL);
}

static void stop_climbing(fw_chain *chain)
{
    chain->learn.climbing = 0;
    if (chain->settings.adapt_scale && !chain->learn.scale_kept) scale_from_climb(chain);
    chain->learn.rows = 0;
}

/* Back to the point before the last look. */
static void undo(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    const uint64_t back = learn->climbed % look == 0 ? look : learn->climbed % look;
    const uint64_t to = learn->climbed - (back < learn->climbed ? back : learn->climbed);
    fw_chain_take(chain, row_x(chain, to), row_g(chain, to), learn->climb_value[to % MEMORY]);
}

/* One iteration: a backtracking search along the direction, one gradient a trial. */
int fw_climb(fw_chain *chain, fw_facts *facts)
{
    fw_walk *walk = &chain->walk;
    fw_learn *learn = &chain->learn;
    fw_point *to = &chain->end[1];
    double *p = chain->end[0].x;
    const size_t d = walk->d;
    if (learn->climbed == 0) remember(chain);
    learn->rows = learn->climbed + 1 < MEMORY ? learn->climbed + 1 : MEMORY;
    direction(chain, p, chain->end[0].w, chain->end[0].c);
    const double slope = fw_dot(d, p, chain->g);
    double step = 1.0;
    int found = 0;
    for (int trial = 0; trial < 30 && slope > 0.0 && isfinite(slope) && !found; ++trial, step *= 0.25) {
        fw_copy(d, chain->x, to->x);
        fw_axpy(d, step, p, to->x);
        ++facts->steps;
        const int status = fw_evaluate(walk, to->x, &to->value, to->g);
        if (status < 0) return status;
        found = status == FW_OK && to->value > chain->value + 1e-4 * step * slope && fw_all_finite(d, to->g);
    }
    facts->acceptance = 1.0;
    facts->energy = -chain->value;
    if (!found) {
        undo(chain);
        stop_climbing(chain);
        return FW_OK;
    }
    fw_chain_take(chain, to->x, to->g, to->value);
    ++learn->climbed;
    remember(chain);
    learn->rows = learn->climbed + 1 < MEMORY ? learn->climbed + 1 : MEMORY;
    if (learn->climbed % look == 0) {
        const double before = learn->climb_value[(learn->climbed - look) % MEMORY];
        const int slow = !(chain->value - before > least_gain(chain));
        if (slow) undo(chain);
        if (slow || learn->climbed >= most_iterations) stop_climbing(chain);
    }
    return FW_OK;
}
