/* Settling: step size, scale, bend and the schedule that orders them.
 *
 * Lead: a few transitions that move the step size only. Windows: each gathers moments of draws and gradients, sets
 * a new scale and new directions at its end and is a third longer than the one before. Tail: the step size alone, over
 * the final base metric. Fixed plans fit the windows to the number asked for; open plans (least < most) go to the tail
 * once two windows in a row have hardly moved the base metric.
 */
#include <float.h>
#include <math.h>
#include <string.h>

#include "chain.h"
#include "kernels.h"

static const uint64_t lead = 10, first_window = 20;
static const double quiet_change = 0.2; /* root mean square of log(new / old half-scale) */
static const uint64_t epoch = 12;       /* transitions of either step size in one look at the acceptance ceiling */
static const double least_bend = 0.02;  /* below it the bend costs and does nothing */

static uint64_t tail_length(uint64_t most)
{
    uint64_t tail = most / 6;
    if (tail < 50) tail = 50;
    if (tail > 150) tail = 150;
    return tail > most / 2 ? most / 2 : tail;
}

/* Length of the window that begins now; 0: no room for one, the tail begins. */
static uint64_t next_window(const fw_learn *learn)
{
    const uint64_t before = learn->window ? learn->window + learn->window / 3 : first_window;
    const uint64_t end = learn->most - learn->tail, begun = learn->done < learn->lead ? learn->lead : learn->done;
    if (begun + before > end) return learn->window == 0 && end > begun + 4 ? end - begun : 0;
    /* a last window that would be cut short by the tail is joined to this one */
    return begun + before + before + before / 3 > end ? end - begun : before;
}

/* How boldly the averaging moves the step: first by the factor `reach`, then by 1 / gamma. Hoffman & Gelman 2014 have 10
 * and 0.05. Halved steps that are far too long are still accepted, at a great price, and orbits that end because the far
 * end would choose other halvings make the rate noisier. */
typedef struct boldness {
    double reach, gamma;
} boldness;

static const boldness *bold(const fw_chain *chain)
{
    static const boldness whole = {10.0, 0.05}, halved = {3.0, 0.1};
    return chain->walk.halvings > 0 ? &halved : &whole;
}

static void restart_average(fw_learn *learn, double reach)
{
    learn->mu = learn->log_step + log(reach);
    learn->shortfall = learn->count = 0.0;
    learn->log_average = learn->log_step;
}

/* Nesterov 2009; Hoffman & Gelman 2014 with their t0 = 10, kappa = 0.75. Where the step would fall below `least` it is
 * held there and the shortfall with it: a few refused transitions in a row (a stuck point, a hard edge) would otherwise
 * pile up a debt that hundreds of accepted ones cannot repay. */
static void dual_average(fw_learn *learn, double gamma, double least, double target, double acceptance)
{
    const double t = learn->count += 1.0, root = sqrt(t);
    const double weight = 1.0 / (t + 10.0);
    learn->shortfall = (1.0 - weight) * learn->shortfall + weight * (target - acceptance);
    learn->log_step = learn->mu - root / gamma * learn->shortfall;
    if (!(learn->log_step > least)) {
        learn->log_step = least;
        learn->shortfall = (learn->mu - least) * gamma / root;
    }
    const double share = 1.0 / (root * sqrt(root));
    learn->log_average = share * learn->log_step + (1.0 - share) * learn->log_average;
}

static void forget_epoch(fw_learn *learn)
{
    learn->whole_sum = learn->half_sum = learn->whole_squares = learn->half_squares = 0.0;
    learn->whole_count = learn->half_count = 0;
    learn->epoch_log_step = learn->log_step;
}

static void clear_window(fw_chain *chain)
{
    const size_t bytes = chain->walk.d * sizeof(double);
    memset(chain->mean_x, 0, bytes);
    memset(chain->roots_x, 0, bytes);
    memset(chain->mean_g, 0, bytes);
    memset(chain->roots_g, 0, bytes);
    chain->learn.in_window = chain->learn.rows = 0;
}

/* A plan that fixes the number of transitions is kept to it; an open one ends a tail from now. */
static void begin_tail(fw_chain *chain, const double *mean, const double *variance)
{
    fw_learn *learn = &chain->learn;
    const uint64_t left = learn->most - learn->done;
    learn->window = 0;
    learn->tail_left = learn->least == learn->most || left < learn->tail ? left : learn->tail;
    if (learn->tail_left == 0) learn->tail_left = 1;
    fw_length_begin(chain, mean, variance);
}

static void finish(fw_chain *chain)
{
    chain->learn.settled = 1;
    if (chain->settings.adapt_step) chain->step_size = exp(chain->learn.log_average);
    fw_length_finish(chain);
}

void fw_learn_plan(fw_chain *chain, size_t least, size_t most)
{
    fw_learn *learn = &chain->learn;
    learn->least = least;
    learn->most = most;
    learn->tail = tail_length(most) + fw_length_budget(chain, most);
    learn->lead = lead;
    learn->done = learn->windows = learn->quiet = learn->tail_left = learn->window = 0;
    learn->settled = most == 0;
    learn->climbing = most > 1 && chain->settings.adapt_scale && learn->climbed == 0;
    learn->search = chain->settings.adapt_step != 0;
    learn->log_step = log(chain->step_size > 0.0 ? chain->step_size : 1.0);
    learn->searched = learn->log_step;
    forget_epoch(learn);
    restart_average(learn, bold(chain)->reach);
    clear_window(chain);
    fw_length_plan(chain);
    if (most == 0) return;
    learn->window = chain->settings.adapt_scale ? next_window(learn) : 0;
    if (learn->window == 0) {
        learn->tail = most;
        begin_tail(chain, NULL, NULL);
    }
}

/* ---- first guess of the step size --------------------------------------------------------------------------------- */

/* log weight after one step from end[0], not halved (halving would accept far too long steps, at a great price); a
 * failed step weighs nothing. */
static int one_step(fw_chain *chain, double step, double *log_weight)
{
    fw_point_copy(&chain->walk, &chain->end[0], &chain->end[1]);
    const int status = fw_walk_whole_step(&chain->walk, &chain->end[1], step);
    *log_weight = status == FW_OK ? chain->end[0].energy - chain->end[1].energy + chain->end[1].log_jacobian : -INFINITY;
    return status < 0 ? status : FW_OK;
}

/* Double or halve until the acceptance of one step crosses 1/2; the last step on the good side is taken. */
static int search_step(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    fw_point *from = &chain->end[0];
    fw_copy(chain->walk.d, chain->x, from->x);
    fw_copy(chain->walk.d, chain->g, from->g);
    from->value = chain->value;
    int status = fw_walk_begin(&chain->walk, from, &chain->random);
    if (status != FW_OK) return status < 0 ? status : FW_OK;
    double step = exp(learn->log_step), weight;
    status = one_step(chain, step, &weight);
    if (status != FW_OK) return status;
    const int good = weight > log(0.5);
    for (int i = 0; i < 100; ++i) {
        const double next = good ? 2.0 * step : 0.5 * step;
        status = one_step(chain, next, &weight);
        if (status != FW_OK) return status;
        const int next_good = weight > log(0.5);
        if (next_good || !good) step = next;
        if (next_good != good) break;
    }
    learn->log_step = learn->epoch_log_step = learn->searched = log(step);
    restart_average(learn, bold(chain)->reach);
    learn->search = 0;
    return FW_OK;
}

/* ---- bend --------------------------------------------------------------------------------------------------------- */

static int tunes_bend(const fw_chain *chain)
{
    return chain->walk.motion == &fw_lagrangian && chain->settings.beta < 0.0;
}

/* Only the surrogate field has a ceiling of acceptance below 1 as the step goes to 0. */
static int has_ceiling(const fw_chain *chain)
{
    return tunes_bend(chain) && chain->walk.curvature == FW_SURROGATE && chain->settings.adapt_step &&
           chain->learn.bend > 0.0;
}

/* beta = bend / median of c.c over recent draws: the median moves far less than the mean from window to window. */
void fw_learn_beta(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    if (!tunes_bend(chain) || learn->ring_count == 0) return;
    const size_t n = learn->ring_count < FW_RING ? (size_t)learn->ring_count : FW_RING;
    unsigned char *order = chain->order; /* of the time before: one value is new, so little has to move */
    if (chain->ordered > n) chain->ordered = 0;
    for (; chain->ordered < n; ++chain->ordered) order[chain->ordered] = (unsigned char)chain->ordered;
    for (size_t i = 1; i < n; ++i) {
        const unsigned char slot = order[i];
        const double value = learn->ring[slot];
        size_t j = i;
        for (; j > 0 && learn->ring[order[j - 1]] > value; --j) order[j] = order[j - 1];
        order[j] = slot;
    }
    double median = 0.5 * (learn->ring[order[(n - 1) / 2]] + learn->ring[order[n / 2]]);
    /* where the base metric fits, |c|^2 is about d; at a mode it is nothing, and a beta from there would hold the chain */
    if (median < 0.01 * (double)chain->walk.d) median = 0.01 * (double)chain->walk.d;
    if (median > 0.0 && isfinite(learn->bend / median)) chain->walk.beta = learn->bend / median;
}

static void remember_gradient(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    double *c = chain->end[0].c;
    fw_base_gradient(&chain->walk.base, chain->g, c);
    learn->ring[learn->ring_count++ % FW_RING] = fw_dot(chain->walk.d, c, c);
}

static double mean_and_error(double sum, double squares, uint64_t count, double *variance)
{
    const double n = (double)count, mean = sum / n;
    *variance = (squares / n - mean * mean) / (n - 1.0);
    return mean;
}

/* No step that is worth its cost lies further below the one where a single step from a typical point is accepted; and
 * one look at the acceptance is to be of steps that are much alike. */
static double lowest_step(const fw_chain *chain)
{
    const fw_learn *learn = &chain->learn;
    const double lowest = learn->searched - log(100.0);
    return has_ceiling(chain) ? fmax(lowest, learn->epoch_log_step - log(4.0)) : lowest;
}

/* Rejections at the step and at half of it, over equal lengths, give by extrapolation the rejection that no step can
 * avoid (the rest falls as its square). More than half of what the target allows: the bend is too strong. The look goes
 * on until it is clear on which side of that it stands, by 1.5 standard errors, or long enough to say. */
static void look_at_ceiling(fw_chain *chain, const fw_route *route, double acceptance)
{
    fw_learn *learn = &chain->learn;
    const double rejection = 1.0 - acceptance;
    *(route->finer ? &learn->half_sum : &learn->whole_sum) += rejection;
    *(route->finer ? &learn->half_squares : &learn->whole_squares) += rejection * rejection;
    ++*(route->finer ? &learn->half_count : &learn->whole_count);
    if (learn->whole_count < epoch || learn->half_count < epoch || learn->whole_count % epoch != 0) return;
    if (learn->tail_left > 0 && learn->tail_left < 2 * epoch) return; /* too late to find the step size of another bend */
    double of_whole, of_half;
    const double whole = mean_and_error(learn->whole_sum, learn->whole_squares, learn->whole_count, &of_whole);
    const double half = mean_and_error(learn->half_sum, learn->half_squares, learn->half_count, &of_half);
    const double least = (4.0 * half - whole) / 3.0, error = sqrt((16.0 * of_half + of_whole) / 9.0);
    const double allowed = 0.5 * (1.0 - chain->settings.acceptance);
    if (fabs(least - allowed) < 1.5 * error && learn->whole_count < 8 * epoch) return;
    learn->ceiling = 1.0 - (least < 0.0 ? 0.0 : least > 1.0 ? 1.0 : least);
    if (least > allowed) {
        learn->bend *= 0.5;
        if (learn->bend < least_bend) learn->bend = chain->walk.beta = 0.0;
        if (learn->log_step < learn->epoch_log_step) learn->log_step = learn->epoch_log_step;
        restart_average(learn, 2.0);
    }
    forget_epoch(learn);
}

/* ---- scale -------------------------------------------------------------------------------------------------------- */

/* s = (mean sqrt|x - center| / mean sqrt|g - center|)^2. For normal targets that is sqrt(var x / var g), the minimiser
 * of the Fisher divergence over diagonal maps (Seyboldt, Carlson & Carpenter 2026), exact from a few draws where the
 * coordinates are independent; half powers keep it steady where variances hang on single draws. A coordinate that has
 * moved but felt no gradient keeps its scale. */
static double scale_ratio(double roots_x, double roots_g, double otherwise)
{
    const double root = roots_x / roots_g, s = root * root;
    return s > 1e-200 && s < 1e200 ? s : otherwise;
}

/* A coordinate that stood while others moved had steps below the spacing of its numbers. */
static double freed(double r, double x)
{
    const double wider = fabs(x) * 0x1p-30 > 1e3 * r ? fabs(x) * 0x1p-30 : 1e3 * r;
    return wider * wider;
}

static void new_scale(const fw_chain *chain, double *scale)
{
    const size_t d = chain->walk.d;
    int moved = 0;
    for (size_t i = 0; i < d && !moved; ++i) moved = chain->roots_x[i] > 0.0;
    for (size_t i = 0; i < d; ++i) {
        const double r = chain->walk.base.r[i];
        const int stood = moved && !(chain->roots_x[i] > 0.0);
        scale[i] = stood ? freed(r, chain->x[i]) : scale_ratio(chain->roots_x[i], chain->roots_g[i], r * r);
    }
}

/* Root mean square of log(new / old standard deviation) of the coordinates, as the base metrics see them. */
static double coordinates_moved(const fw_chain *chain, const double *scale, size_t k, const double *directions,
                                const double *lambda)
{
    const fw_base *base = &chain->walk.base;
    const size_t d = base->d;
    double sum = 0.0;
    for (size_t i = 0; i < d; ++i) {
        double before = 1.0, after = 1.0;
        for (size_t j = 0; j < base->k; ++j) {
            const double e = base->directions[j * d + i];
            before += e * e * (base->lambda[j] - 1.0);
        }
        for (size_t j = 0; j < k; ++j) {
            const double e = directions[j * d + i];
            after += e * e * (lambda[j] - 1.0);
        }
        const double moved = 0.5 * log(scale[i] / base->r[i] / base->r[i] * (after / before));
        sum += moved * moved;
    }
    return sqrt(sum / (double)d);
}

void fw_learn_first_scale(fw_chain *chain)
{
    if (chain->learn.base_given || !chain->settings.adapt_scale) return;
    const double *g = chain->g;
    double steepest = 0.0;
    double *scale = chain->end[0].w;
    const size_t d = chain->walk.d;
    for (size_t i = 0; i < d; ++i) steepest = fabs(g[i]) > steepest ? fabs(g[i]) : steepest;
    for (size_t i = 0; i < d; ++i) {
        double slope = fabs(g[i]) > 1e-8 * steepest ? fabs(g[i]) : 1e-8 * steepest;
        slope = slope < 1e-100 ? 1.0 : slope > 1e100 ? 1e100 : slope;
        scale[i] = 1.0 / (slope * slope);
    }
    fw_base_set(&chain->walk.base, scale, 0, NULL, NULL);
    chain->learn.base_given = 1;
}

/* The largest |log(new / old standard deviation)| along the new directions: coordinates may not show it. */
static double directions_moved(const fw_chain *chain, const double *scale, size_t k, const double *directions,
                               const double *lambda)
{
    double largest = 0.0, *p = chain->end[0].x, *c = chain->end[0].c;
    for (size_t j = 0; j < k; ++j) {
        for (size_t i = 0; i < chain->walk.d; ++i) p[i] = directions[j * chain->walk.d + i] / sqrt(scale[i]);
        fw_base_gradient(&chain->walk.base, p, c);
        const double moved = fabs(0.5 * log(lambda[j] / fw_dot(chain->walk.d, c, c)));
        if (moved > largest) largest = moved;
    }
    return largest;
}

static void remember_row(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    if (chain->settings.rank == 0) return;
    const uint64_t stride = learn->window > chain->rows ? (learn->window + chain->rows - 1) / chain->rows : 1;
    if (learn->in_window != learn->rows * stride) return;
    fw_copy(chain->walk.d, chain->x, chain->rows_x + learn->rows * chain->walk.d);
    fw_copy(chain->walk.d, chain->g, chain->rows_g + learn->rows * chain->walk.d);
    ++learn->rows;
}

static void close_window(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    double lambda[FW_MAX_DIRECTIONS], *scale = chain->end[1].c;
    new_scale(chain, scale);
    const size_t k = chain->settings.rank ? fw_find_directions(chain, scale, chain->found, lambda) : 0;
    const double of_coordinates = coordinates_moved(chain, scale, k, chain->found, lambda);
    const double of_directions = directions_moved(chain, scale, k, chain->found, lambda);
    learn->change = of_coordinates > of_directions ? of_coordinates : of_directions;
    fw_base_set(&chain->walk.base, scale, k, chain->found, lambda);
    fw_length_spread(chain, chain->end[0].w, chain->end[0].x);
    clear_window(chain);
    learn->ring_count = 0;
    forget_epoch(learn);
    if (tunes_bend(chain)) remember_gradient(chain);
    learn->search = chain->settings.adapt_step != 0;
    ++learn->windows;
    learn->quiet = learn->change < quiet_change ? learn->quiet + 1 : 0;
    const int stable = learn->quiet >= 2 && learn->done + learn->tail >= learn->least && learn->least < learn->most;
    learn->window = stable ? 0 : next_window(learn);
    if (learn->window == 0) begin_tail(chain, chain->end[0].w, chain->end[0].x);
}

/* An iteration of the climb counts as a transition; it may take half of the plan, and the windows begin when it ends. */
void fw_learn_climbed(fw_chain *chain)
{
    fw_learn *learn = &chain->learn;
    ++learn->done;
    if (learn->climbing && learn->done >= learn->most / 2) fw_climb_stop(chain);
    if (learn->climbing) return;
    learn->lead = learn->done + lead;
    learn->window = 0;
    if (learn->tail_left == 0) learn->window = next_window(learn);
    if (learn->window == 0) begin_tail(chain, NULL, NULL);
}

/* ---- one settling transition --------------------------------------------------------------------------------------- */

/* Long paths over a base metric that is still wrong buy little: window j allows 2^(3 + j/3) steps, the tail all. */
static unsigned allowed_doublings(const fw_chain *chain)
{
    const unsigned most = chain->settings.doublings;
    const uint64_t early = 3 + chain->learn.windows / 3;
    if (chain->learn.settled || chain->learn.tail_left > 0 || early >= most) return most;
    return (unsigned)early;
}

int fw_learn_route(fw_chain *chain, fw_route *route)
{
    fw_learn *learn = &chain->learn;
    route->finer = 0;
    route->step_size = chain->step_size;
    route->doublings = allowed_doublings(chain);
    route->steps = fw_length_steps(chain, route->step_size);
    if (learn->settled || !chain->settings.adapt_step) return FW_OK;
    if (learn->search) {
        const int status = search_step(chain);
        if (status != FW_OK) return status;
    }
    const int pilot = fw_length_piloting(chain);
    const double step = exp(pilot ? learn->log_average : learn->log_step);
    route->steps = fw_length_steps(chain, step);
    route->finer = has_ceiling(chain) && !pilot && (learn->done & 1);
    route->step_size = step * (route->finer ? 0.5 : 1.0);
    return FW_OK;
}

void fw_learn_update(fw_chain *chain, const fw_route *route, const fw_facts *facts)
{
    fw_learn *learn = &chain->learn;
    ++learn->done;
    const int pilot = fw_length_piloting(chain);
    if (chain->settings.adapt_step && !route->finer && !pilot) {
        dual_average(learn, bold(chain)->gamma, lowest_step(chain), chain->settings.acceptance, facts->acceptance);
    }
    if (has_ceiling(chain) && !pilot) look_at_ceiling(chain, route, facts->acceptance);
    if (tunes_bend(chain)) {
        remember_gradient(chain);
        fw_learn_beta(chain);
    }
    fw_length_update(chain, facts);
    if (learn->tail_left > 0) {
        if (--learn->tail_left == 0) finish(chain);
    } else if (learn->done > learn->lead) {
        remember_row(chain);
        ++learn->in_window;
        fw_gather(chain->walk.d, (double)learn->in_window, chain->x, chain->mean_x, chain->roots_x);
        fw_gather(chain->walk.d, (double)learn->in_window, chain->g, chain->mean_g, chain->roots_g);
        if (learn->in_window == learn->window) close_window(chain);
    }
}
