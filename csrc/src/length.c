/* Settling of the length of jittered paths: by doubling, on the worth of pilots.
 *
 * Once the base metric stands, pilots of some tens of transitions at one step size try mean lengths twice and half as
 * long as the best so far. What counts is effective draws per gradient, from the share of its variance that the centre
 * and the square of every coordinate lose from draw to draw, which is their mean squared jump (Pasarica & Gelman 2010);
 * of these shares the mean of the least eighth, as the least of many would mostly be the noisiest. A jump is measured
 * against the spread of the last window and all pilots so far, so that a coordinate that hardly moves within a pilot is
 * seen to stand, and the best pilot is weighed anew when another is compared with it.
 */
#include <math.h>
#include <string.h>

#include "chain.h"
#include "kernels.h"

enum { BINS = 64 };
static const double first_reach = 3.14159265358979323846; /* half a period of a normal target, the longest path */
static const uint64_t most_draws = 40, most_pilots = 7, most_steps = 1024;

int fw_length_found_here(const fw_chain *chain) { return chain->path == &fw_jittered && chain->settings.steps == 0; }

/* Transitions of a plan set aside: some to find the step size over the final base metric, then the pilots. */
uint64_t fw_length_budget(const fw_chain *chain, uint64_t most)
{
    if (!fw_length_found_here(chain)) return 0;
    const uint64_t whole = most_draws * (most_pilots + 1), budget = most / 3 < whole ? most / 3 : whole;
    return budget < 40 ? 0 : budget;
}

/* The most steps of a path at this step size; its mean length is half of the reach. */
static uint64_t steps_for(double reach, double step)
{
    const double steps = floor(reach / step + 0.5);
    return steps >= (double)most_steps ? most_steps : steps > 1.0 ? (uint64_t)steps : 1;
}

size_t fw_length_steps(const fw_chain *chain, double step)
{
    const fw_learn *learn = &chain->learn;
    if (!fw_length_found_here(chain)) return chain->settings.steps;
    if (learn->settled) return (size_t)learn->steps;
    uint64_t steps = steps_for(learn->reach, step);
    /* as for no-U-turn paths, whose limit grows more slowly: long ones over a base metric still wrong buy little */
    const uint64_t early = 3 + learn->windows / 2;
    if (learn->tail_left == 0 && early < 10 && steps > (UINT64_C(1) << early)) steps = UINT64_C(1) << early;
    return (size_t)steps;
}

void fw_length_plan(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    learn->pilots_left = learn->pilot_wait = 0;
    if (learn->reach == 0.0) learn->reach = first_reach;
}

void fw_length_finish(fw_chain *chain)
{
    if (fw_length_found_here(chain)) chain->learn.steps = steps_for(chain->learn.reach, chain->step_size);
}

/* Means and variances of the window that ends, the latter from its half powers: E sqrt|z| = 0.82218 for a standard normal
 * z. */
void fw_length_spread(const fw_chain *chain, double *mean, double *variance)
{
    if (!fw_length_found_here(chain)) return;
    const double n = (double)chain->learn.in_window - 1.0;
    fw_copy(chain->walk.d, chain->mean_x, mean);
    for (size_t i = 0; i < chain->walk.d; ++i) {
        const double root = chain->roots_x[i] / (n * 0.82217895866);
        variance[i] = root * root * root * root;
    }
}

/* The vectors of the windows serve the pilots: mean_x and roots_x hold mean and sum of squared deviations of the last
 * window and all that came after it, mean_g and roots_g the mean squared jumps of the best pilot, centre and square. */
void fw_length_begin(fw_chain *chain, const double *mean, const double *variance)
{
    fw_learn *learn = &chain->learn;
    const uint64_t budget = fw_length_budget(chain, learn->most);
    if (budget == 0 || learn->tail_left < budget) return;
    learn->pilot_draws = budget / 5 < most_draws ? budget / 5 : most_draws;
    if (learn->pilot_draws > chain->rows) learn->pilot_draws = chain->rows;
    learn->pilot_wait = learn->pilot_draws < 20 ? 20 : learn->pilot_draws;
    learn->pilots_left = (budget - learn->pilot_wait) / learn->pilot_draws;
    if (learn->pilots_left > most_pilots) learn->pilots_left = most_pilots;
    learn->best_reach = learn->reach;
    learn->factor = learn->gathered = 0.0;
    learn->rows = learn->pilots = learn->pilot_gradients = learn->best_gradients = 0;
    if (!variance) return;
    learn->gathered = (double)learn->pilot_draws; /* the window counts no more than a pilot */
    fw_copy(chain->walk.d, mean, chain->mean_x);
    fw_copy(chain->walk.d, variance, chain->roots_x);
    fw_scale(chain->walk.d, learn->gathered, chain->roots_x);
}

int fw_length_piloting(const fw_chain *chain) { return chain->learn.pilots_left > 0 && chain->learn.pilot_wait == 0; }

static void gather(fw_chain *chain)
{
    const double n = chain->learn.gathered += 1.0;
    for (size_t i = 0; i < chain->walk.d; ++i) {
        const double off = chain->x[i] - chain->mean_x[i];
        chain->mean_x[i] += off / n;
        chain->roots_x[i] += off * (chain->x[i] - chain->mean_x[i]);
    }
}

/* Mean squared jumps of every coordinate in the rows of a pilot, and of its square around the mean of the pilot. */
static void measure_jumps(const fw_chain *chain, double *centre, double *square)
{
    const size_t d = chain->walk.d, n = chain->learn.rows;
    for (size_t i = 0; i < d; ++i) {
        const double *x = chain->rows_x + i;
        double mean = 0.0, before = 0.0;
        for (size_t j = 0; j < n; ++j) mean += x[j * d] / (double)n;
        centre[i] = square[i] = 0.0;
        for (size_t j = 0; j < n; ++j) {
            const double y = x[j * d] - mean, by = y * y - before * before;
            if (j > 0) {
                centre[i] += (y - before) * (y - before) / (double)(n - 1);
                square[i] += by * by / (double)(n - 1);
            }
            before = y;
        }
    }
}

/* 1 - autocorrelation at lag one. Anticorrelated draws count as independent ones: what the centre gains by them its
 * square does not. */
static double lost(double jumps, double variance)
{
    if (!(variance > 0.0)) return 1.0;
    const double share = 0.5 * jumps / variance;
    return share > 1e-6 ? (share < 1.0 ? share : 1.0) : 1e-6;
}

/* Effective draws per draw: of the mean of the least eighth of all shares (the smaller of centre and square, whose
 * variance is taken as that of a normal), at least of one, found by a histogram of their logarithms; as if
 * autocorrelations fell by the same factor from lag to lag. */
static double effective_share(const fw_chain *chain, const double *centre, const double *square)
{
    const size_t d = chain->walk.d, wanted = (d + 7) / 8;
    double sum[BINS] = {0.0}, total = 0.0;
    size_t count[BINS] = {0}, taken = 0;
    for (size_t i = 0; i < d; ++i) {
        const double variance = chain->roots_x[i] / chain->learn.gathered;
        const double of_square = lost(square[i], 2.0 * variance * variance);
        double share = lost(centre[i], variance);
        if (of_square < share) share = of_square;
        int bin = (int)(-4.0 * log(share));
        bin = bin < 0 ? 0 : bin >= BINS ? BINS - 1 : bin;
        sum[bin] += share;
        ++count[bin];
    }
    for (int bin = BINS - 1; bin >= 0 && taken < wanted; --bin) {
        const size_t take = count[bin] < wanted - taken ? count[bin] : wanted - taken;
        if (take) total += sum[bin] * (double)take / (double)count[bin];
        taken += take;
    }
    const double mean = total / (double)wanted;
    return mean / (2.0 - mean);
}

/* No more pilots: the best reach so far is it, and what an open plan has left is its tail. */
static void end_pilots(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    learn->reach = learn->best_reach;
    learn->pilots_left = learn->rows = 0;
    const uint64_t tail = learn->tail - fw_length_budget(chain, learn->most);
    if (learn->least < learn->most && tail < learn->tail_left) learn->tail_left = tail > 1 ? tail : 2;
}

static void close_pilot(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    double *centre = chain->end[0].x, *square = chain->end[0].c;
    measure_jumps(chain, centre, square);
    const double now = effective_share(chain, centre, square) / (double)learn->pilot_gradients;
    const double step = exp(learn->log_average), longest = (double)most_steps * step;
    const int first = learn->pilots++ == 0;
    const int better = first || now > effective_share(chain, chain->mean_g, chain->roots_g) / (double)learn->best_gradients;
    int last = --learn->pilots_left == 0;
    if (better) {
        learn->best_reach = learn->reach;
        learn->best_gradients = learn->pilot_gradients;
        fw_copy(chain->walk.d, centre, chain->mean_g);
        fw_copy(chain->walk.d, square, chain->roots_g);
    }
    if (first)
        learn->factor = 2.0 * learn->reach > longest ? 0.5 : 2.0;
    else if (!better && learn->pilots == 2 && learn->factor > 1.0)
        learn->factor = 0.5; /* the second pilot, of twice the length, was worth less */
    else if (!better)
        last = 1;
    learn->reach = learn->factor * learn->best_reach;
    learn->rows = learn->pilot_gradients = 0;
    if (last || learn->reach < 1.5 * step || learn->reach > longest) end_pilots(chain);
}

void fw_length_update(fw_chain *chain, const fw_facts *facts)
{
    fw_learn *learn = &chain->learn;
    if (learn->pilots_left == 0) return;
    gather(chain);
    if (learn->pilot_wait > 0) {
        --learn->pilot_wait;
        return;
    }
    fw_copy(chain->walk.d, chain->x, chain->rows_x + learn->rows * chain->walk.d);
    ++learn->rows;
    learn->pilot_gradients += (uint64_t)facts->gradients + (uint64_t)facts->products;
    if (learn->rows == learn->pilot_draws) close_pilot(chain);
}
