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

/* What the iterations up to a look must gain: to begin with, more than a few standard deviations in every coordinate
 * amount to (short paths find home from there, and what looks like a rise may be the neck of a funnel). */
static double least_gain(const fw_chain *chain, uint64_t looked_at)
{
    const double d = (double)chain->walk.d;
    return looked_at == 0 ? 10.0 * d + 100.0 : d + 10.0;
}

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

void fw_climb_stop(fw_chain *chain)
{
    chain->learn.climbing = 0;
    if (chain->settings.adapt_scale && !chain->learn.scale_kept) scale_from_climb(chain);
    chain->learn.rows = 0;
    if (chain->learn.climbed == 0) chain->learn.climbed = 1; /* once is enough */
}

/* The climb goes on while the iterations since the last look have gained enough; those that have not are undone. */
static int worth_it(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    const uint64_t since = learn->climbed % look == 0 && learn->climbed > 0 ? look : learn->climbed % look;
    const uint64_t back = learn->climbed - since;
    if (chain->value - learn->climb_value[back % MEMORY] > least_gain(chain, back)) return 1;
    fw_chain_take(chain, row_x(chain, back), row_g(chain, back), learn->climb_value[back % MEMORY]);
    return 0;
}

/* Is x + step p a place to go to? Evaluates it into end[1]. */
static int better(fw_chain *chain, const double *p, double step, double least, fw_facts *facts, int *yes)
{
    const size_t d = chain->walk.d;
    fw_point *to = &chain->end[1];
    fw_copy(d, chain->x, to->x);
    fw_axpy(d, step, p, to->x);
    ++facts->steps;
    const int status = fw_evaluate(&chain->walk, to->x, &to->value, to->g);
    *yes = status == FW_OK && to->value > least && fw_all_finite(d, to->g);
    return status < 0 ? status : FW_OK;
}

/* 1, or what moves the coordinate that moves most by some spacings of its numbers. */
static double first_length(const fw_chain *chain, const double *p)
{
    double most = 0.0;
    for (size_t i = 0; i < chain->walk.d; ++i) {
        const double moves = fabs(p[i]) / (fabs(chain->x[i]) + 1e-300);
        if (moves > most) most = moves;
    }
    return most < 0x1p-40 && most > 0.0 ? 0x1p-40 / most : 1.0;
}

/* A search along p, one gradient a trial: shorter until the value rises by a part of what the slope promises. While
 * nothing is known of the curvature the first trial says little of the length, so there the step also grows. */
static int search(fw_chain *chain, const double *p, double slope, fw_facts *facts, int *found)
{
    double step = first_length(chain, p);
    const double whole = step;
    int status;
    *found = 0;
    for (int trial = 0; trial < 30 && !*found; ++trial, step *= 0.25) {
        status = better(chain, p, step, chain->value + 1e-4 * step * slope, facts, found);
        if (status < 0) return status;
    }
    if (!*found || chain->learn.climbed > 0 || step < 0.25 * whole) return FW_OK;
    fw_candidate best = {.x = chain->end[0].w, .g = chain->end[0].c};
    int grows = 1;
    for (step = 4.0 * whole; grows && step < 1e30 * whole; step *= 4.0) {
        fw_copy(chain->walk.d, chain->end[1].x, best.x);
        fw_copy(chain->walk.d, chain->end[1].g, best.g);
        best.value = chain->end[1].value;
        status = better(chain, p, step, best.value, facts, &grows);
        if (status < 0) return status;
    }
    fw_copy(chain->walk.d, best.x, chain->end[1].x);
    fw_copy(chain->walk.d, best.g, chain->end[1].g);
    chain->end[1].value = best.value;
    return FW_OK;
}

int fw_climb(fw_chain *chain, fw_facts *facts)
{
    fw_learn *learn = &chain->learn;
    const fw_point *to = &chain->end[1];
    double *p = chain->end[0].x;
    int found = 0;
    if (learn->climbed == 0) remember(chain);
    learn->rows = learn->climbed + 1 < MEMORY ? learn->climbed + 1 : MEMORY;
    direction(chain, p, chain->end[0].w, chain->end[0].c);
    const double slope = fw_dot(chain->walk.d, p, chain->g);
    facts->acceptance = 1.0;
    facts->energy = -chain->value;
    if (slope > 0.0 && isfinite(slope)) {
        const int status = search(chain, p, slope, facts, &found);
        if (status < 0) return status;
    }
    if (!found) {
        worth_it(chain);
        fw_climb_stop(chain);
        return FW_OK;
    }
    fw_chain_take(chain, to->x, to->g, to->value);
    ++learn->climbed;
    remember(chain);
    learn->rows = learn->climbed + 1 < MEMORY ? learn->climbed + 1 : MEMORY;
    if (learn->climbed % look == 0) {
        if (!worth_it(chain) || learn->climbed >= most_iterations) fw_climb_stop(chain);
        else if (chain->settings.adapt_scale && !chain->learn.scale_kept) scale_from_climb(chain);
    }
    return FW_OK;
}
