/* A chain: one workspace block, transitions that happen whole or not at all. */
#include "chain.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "kernels.h"

/* ---- the workspace ------------------------------------------------------------------------------------------------- */

/* Gives out vectors of one block; with block NULL it only counts. */
typedef struct purse {
    double *block;
    size_t d, used;
} purse;

static double *vectors(purse *from, size_t count)
{
    double *v = from->block ? from->block + from->used * from->d : NULL;
    from->used += count;
    return count ? v : NULL;
}

static void lay_out_point(purse *from, fw_point *p, int curved)
{
    p->x = vectors(from, 1);
    p->w = vectors(from, 1);
    p->c = vectors(from, 1);
    p->g = vectors(from, 1);
    p->hc = vectors(from, curved ? 1 : 0);
}

static void lay_out_orbit(purse *from, fw_chain *chain)
{
    const int metric = chain->settings.turn == FW_TURN_METRIC;
    fw_candidate *candidates[] = {&chain->fresh, &chain->held};
    for (size_t i = 0; i < 2; ++i) {
        candidates[i]->x = vectors(from, 1);
        candidates[i]->g = vectors(from, 1);
    }
    chain->orbit_rho = vectors(from, 1);
    chain->spare_rho = vectors(from, 1);
    chain->seam = vectors(from, 1);
    for (unsigned i = 0; i <= chain->settings.doublings + 1; ++i) {
        fw_piece *piece = i == 0 ? &chain->carry : &chain->level[i - 1];
        piece->first = vectors(from, 1);
        piece->rho = vectors(from, 1);
        piece->last = vectors(from, i > 0 ? 1 : 0);
        piece->first_p = vectors(from, metric ? 1 : 0);
    }
}

/* More rows see directions sooner; their number falls where they would be most of the memory and time of a window. */
static size_t rows_of(const fw_chain *chain)
{
    const size_t wanted = chain->walk.d <= 2000 ? FW_WINDOW_ROWS : chain->walk.d <= 20000 ? 40 : 24;
    if (fw_length_found_here(chain)) return wanted;
    if (!chain->settings.adapt_scale) return 0;
    return chain->settings.rank == 0 ? FW_CLIMB_ROWS : wanted;
}

static void lay_out(purse *from, fw_chain *chain)
{
    fw_walk *walk = &chain->walk;
    const int curved = walk->motion->uses_products && walk->curvature != FW_SURROGATE;
    chain->x = vectors(from, 1);
    chain->g = vectors(from, 1);
    walk->base.r = vectors(from, 1);
    walk->base.directions = vectors(from, chain->settings.rank);
    walk->failed_at = vectors(from, 1);
    for (size_t i = 0; i < 2; ++i) lay_out_point(from, &chain->end[i], curved);
    if (walk->halvings > 0)
        for (size_t i = 0; i < 2; ++i) lay_out_point(from, &walk->spare[i], curved);
    walk->natural = vectors(from, curved ? 1 : 0);
    walk->product = vectors(from, curved ? 1 : 0);
    walk->probe = vectors(from, curved ? 1 : 0);
    chain->mean_x = vectors(from, 1);
    chain->roots_x = vectors(from, 1);
    chain->mean_g = vectors(from, 1);
    chain->roots_g = vectors(from, 1);
    chain->rows = rows_of(chain);
    chain->rows_x = vectors(from, chain->rows);
    chain->rows_g = vectors(from, chain->rows);
    chain->found = vectors(from, chain->rows ? chain->settings.rank : 0);
    chain->known = vectors(from, chain->rows ? chain->settings.rank : 0);
    if (chain->path == &fw_nouturn) lay_out_orbit(from, chain);
}

/* ---- making and ending --------------------------------------------------------------------------------------------- */

static int within(double x, double low, double high) { return x >= low && x <= high; }

static int settings_fine(const fw_settings *s, size_t d)
{
    return d > 0 && d <= SIZE_MAX / 4096 && fw_motion_named(s->motion) && fw_path_named(s->path) &&
           d >= fw_motion_named(s->motion)->least_dimension &&
           s->doublings >= 1 && s->doublings < FW_MAX_DOUBLINGS && s->halvings <= FW_MAX_HALVINGS &&
           s->halving_bound > 0.0 && within(s->bend, 0.0, 1e6) && isfinite(s->beta) && within(s->step_size, 0.0, 1e300) &&
           s->acceptance > 0.0 && s->acceptance < 1.0 && s->settle_least <= s->settle_most && s->rank <= FW_MAX_DIRECTIONS &&
           (s->scheme == FW_SPLIT || s->scheme == FW_SEMI_EXPLICIT) && s->curvature >= FW_SURROGATE &&
           s->curvature <= FW_PRODUCT && (s->turn == FW_TURN_BASE || s->turn == FW_TURN_METRIC);
}

int fw_chain_new(const fw_target *target, const fw_random *random, const fw_settings *settings, fw_chain **out)
{
    *out = NULL;
    if (!target || !random || !settings || !target->density || !settings_fine(settings, target->dimension))
        return FW_BAD_ARGUMENT;
    fw_chain *chain = calloc(1, sizeof *chain);
    if (!chain) return FW_NO_MEMORY;
    chain->settings = *settings;
    chain->random = *random;
    chain->path = fw_path_named(settings->path);
    fw_walk *walk = &chain->walk;
    walk->target = *target;
    walk->d = walk->base.d = target->dimension;
    walk->motion = fw_motion_named(settings->motion);
    walk->scheme = settings->scheme;
    walk->curvature = settings->curvature;
    walk->beta = settings->beta > 0.0 ? settings->beta : 0.0;
    walk->halvings = settings->halvings;
    walk->halving_bound = settings->halving_bound;
    chain->settings.motion = walk->motion->name;
    chain->settings.path = chain->path->name;
    if (walk->motion->uses_products && walk->curvature == FW_PRODUCT && !target->product) {
        free(chain);
        return FW_NO_PRODUCT;
    }
    purse count = {NULL, walk->d, 0};
    lay_out(&count, chain);
    chain->vectors = count.used;
    chain->block = calloc(count.used * walk->d, sizeof(double));
    if (!chain->block) {
        free(chain);
        return FW_NO_MEMORY;
    }
    chain->bytes = count.used * walk->d * sizeof(double) + sizeof *chain;
    purse give = {chain->block, walk->d, 0};
    lay_out(&give, chain);
    for (size_t i = 0; i < walk->d; ++i) walk->base.r[i] = 1.0;
    chain->step_size = settings->step_size;
    chain->learn.bend = settings->bend;
    chain->learn.ceiling = 1.0;
    chain->learn.steps = settings->steps > 0 ? settings->steps : 16;
    fw_learn_plan(chain, settings->settle_least, settings->settle_most);
    *out = chain;
    return FW_OK;
}

void fw_chain_free(fw_chain *chain)
{
    if (!chain) return;
    free(chain->block);
    free(chain);
}

void fw_chain_watch(fw_chain *chain, const volatile int *flag) { chain->walk.watch = flag; }

/* ---- starting ------------------------------------------------------------------------------------------------------ */

int fw_chain_set_base(fw_chain *chain, const double *scale, size_t count, const double *directions, const double *lambda)
{
    if (!fw_all_positive(chain->walk.d, scale) || count > chain->settings.rank ||
        (count > 0 && (!fw_all_positive(count, lambda) || !fw_all_finite(count * chain->walk.d, directions))))
        return FW_BAD_ARGUMENT;
    fw_base_set(&chain->walk.base, scale, count, directions, lambda);
    chain->learn.base_given = chain->learn.scale_kept = 1;
    return FW_OK;
}

size_t fw_chain_base(const fw_chain *chain, double *scale, double *directions, double *lambda)
{
    const fw_base *base = &chain->walk.base;
    if (scale) fw_scale_by(base->d, base->r, base->r, scale);
    if (directions && base->k) memcpy(directions, base->directions, base->k * base->d * sizeof(double));
    if (lambda && base->k) memcpy(lambda, base->lambda, base->k * sizeof(double));
    return base->k;
}

void fw_chain_take(fw_chain *chain, const double *x, const double *g, double value)
{
    fw_copy(chain->walk.d, x, chain->x);
    fw_copy(chain->walk.d, g, chain->g);
    chain->value = value;
}

int fw_chain_start(fw_chain *chain, const double *x)
{
    fw_walk *walk = &chain->walk;
    fw_point *p = &chain->end[0];
    memcpy(p->x, x, walk->d * sizeof *x);
    const int status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status < 0) return status;
    if (status > 0 || !fw_all_finite(walk->d, p->x) || !fw_all_finite(walk->d, p->g)) return FW_BAD_START;
    fw_chain_take(chain, p->x, p->g, p->value);
    chain->started = 1;
    if (!chain->learn.settled) fw_learn_first_scale(chain);
    if (chain->settings.beta < 0.0) {
        fw_base_gradient(&walk->base, chain->g, p->c);
        chain->learn.ring_count = 0;
        chain->learn.ring[chain->learn.ring_count++] = fw_dot(walk->d, p->c, p->c);
        if (!chain->learn.settled || walk->beta == 0.0) fw_learn_beta(chain);
    }
    return FW_OK;
}

int fw_chain_settle(fw_chain *chain, size_t least, size_t most)
{
    if (least > most) return FW_BAD_ARGUMENT;
    fw_learn_plan(chain, least, most);
    if (chain->started && !chain->learn.settled) fw_learn_first_scale(chain);
    return FW_OK;
}

int fw_chain_density_changed(fw_chain *chain, const double *x)
{
    if (!x && !chain->started) return FW_NOT_STARTED;
    const int status = fw_chain_start(chain, x ? x : chain->x);
    if (status != FW_OK || chain->learn.settled) return status;
    if (chain->learn.climbing) chain->learn.climbed = 0; /* the points it remembers are of the old density */
    return fw_chain_settle(chain, (size_t)chain->learn.least, (size_t)chain->learn.most);
}

int fw_chain_settled(const fw_chain *chain) { return chain->learn.settled != 0; }

/* ---- transitions --------------------------------------------------------------------------------------------------- */

static int attempt(fw_chain *chain, fw_route *route, fw_facts *facts)
{
    fw_walk *walk = &chain->walk;
    fw_point *p = &chain->end[0];
    if (chain->learn.climbing) return fw_climb(chain, facts);
    int status = fw_learn_route(chain, route);
    if (status != FW_OK) return status;
    facts->step_size = route->step_size;
    fw_copy(walk->d, chain->x, p->x);
    fw_copy(walk->d, chain->g, p->g);
    p->value = chain->value;
    status = fw_walk_begin(walk, p, &chain->random);
    if (status < 0) return status;
    if (status > 0) { /* no path can leave from here with this velocity: the chain stays */
        facts->failure = status;
        facts->energy = -chain->value;
        return FW_OK;
    }
    return chain->path->travel(chain, route, facts);
}

/* A transition as a transaction: on a status < 0 everything exported is as it was. */
static int transition(fw_chain *chain, fw_facts *facts)
{
    fw_walk *walk = &chain->walk;
    const uint64_t gradients = walk->gradients, products = walk->products, halved = walk->halved;
    const int settling = !chain->learn.settled, climbing = chain->learn.climbing != 0;
    const int learning = climbing || (settling && chain->learn.search); /* the only attempts that change what is learned */
    fw_learn before;
    if (learning) before = chain->learn;
    memset(facts, 0, sizeof *facts);
    fw_route route;
    const int status = attempt(chain, &route, facts);
    if (status < 0) {
        walk->gradients = gradients;
        walk->products = products;
        walk->halved = halved;
        if (learning) chain->learn = before;
        return status;
    }
    facts->gradients = (int32_t)(walk->gradients - gradients);
    facts->products = (int32_t)(walk->products - products);
    facts->log_density = chain->value;
    ++chain->transitions;
    if (climbing) fw_learn_climbed(chain);
    else if (settling) fw_learn_update(chain, &route, facts);
    return FW_OK;
}

static void write_row(const fw_output *out, size_t d, const double *x, size_t row, double *to)
{
    if (!to) return;
    if (!out->watched) {
        memcpy(to + row * d, x, d * sizeof(double));
        return;
    }
    to += row * out->watched_count;
    for (size_t j = 0; j < out->watched_count; ++j) to[j] = x[out->watched[j]];
}

static void write_out(const fw_chain *chain, size_t i, const fw_facts *facts, fw_output *out)
{
    const size_t d = chain->walk.d;
    write_row(out, d, chain->x, i, out->draws);
    if (out->mean) fw_gather_moments(d, (double)++out->gathered, chain->x, out->mean, out->squares);
    if (out->gradients) memcpy(out->gradients + i * d, chain->g, d * sizeof(double));
    if (out->facts) out->facts[i] = *facts;
    if (facts->failure && out->failures < out->failures_room) {
        const size_t row = out->failures++;
        if (out->failure_index) out->failure_index[row] = (int64_t)i;
        if (out->failure_code) out->failure_code[row] = facts->failure;
        write_row(out, d, chain->walk.failed_at, row, out->failure_position);
    }
}

int fw_chain_run(fw_chain *chain, size_t n, fw_output *output, size_t *done)
{
    *done = 0;
    if (!chain->started) return FW_NOT_STARTED;
    const uint64_t settled = chain->learn.settled;
    if (chain->random.mark) chain->random.mark(chain->random.state);
    for (size_t i = 0; i < n && chain->learn.settled == settled; ++i) {
        fw_facts facts;
        const int status = chain->walk.watch && *chain->walk.watch ? FW_INTERRUPTED : transition(chain, &facts);
        if (status < 0) return status;
        if (output) write_out(chain, i, &facts, output);
        ++*done;
        if (chain->random.mark) chain->random.mark(chain->random.state);
    }
    return FW_OK;
}

/* ---- one path by hand ---------------------------------------------------------------------------------------------- */

static void trace(const fw_chain *chain, const fw_point *p, size_t row, fw_path_out *out)
{
    const size_t d = chain->walk.d;
    if (out->trace_x) memcpy(out->trace_x + row * d, p->x, d * sizeof(double));
    if (out->trace_v) fw_base_velocity(&chain->walk.base, p->w, out->trace_v + row * d);
    if (out->trace_facts) {
        out->trace_facts[3 * row] = p->value;
        out->trace_facts[3 * row + 1] = p->energy;
        out->trace_facts[3 * row + 2] = p->log_jacobian;
    }
}

int fw_chain_integrate(fw_chain *chain, double *x, double *v, double step_size, size_t steps, fw_path_out *out)
{
    fw_walk *walk = &chain->walk;
    fw_point *p = &chain->end[0];
    const uint64_t gradients = walk->gradients, products = walk->products;
    memcpy(p->x, x, walk->d * sizeof *x);
    fw_base_whiten_velocity(&walk->base, v, p->w);
    p->log_jacobian = 0.0;
    out->steps_done = 0;
    int status = fw_walk_arrive(walk, p);
    if (status == FW_OK) status = walk->motion->complete(walk, p);
    const double start = p->energy;
    if (status == FW_OK) trace(chain, p, 0, out);
    const int apart = out->trace_v != NULL; /* a velocity is known where a row of steps ends */
    while (status == FW_OK && out->steps_done < steps) {
        const int first = apart || out->steps_done == 0, last = apart || out->steps_done + 1 == steps;
        status = fw_walk_step_in_row(walk, p, step_size, first, last);
        if (status == FW_OK) trace(chain, p, ++out->steps_done, out);
    }
    out->gradients = walk->gradients - gradients;
    out->products = walk->products - products;
    if (status != FW_OK) {
        if (status > 0 && out->steps_done == 0) fw_walk_failed(walk, p->x);
        return status;
    }
    out->log_density = p->value;
    out->log_jacobian = p->log_jacobian;
    out->log_ratio = start - p->energy + p->log_jacobian;
    memcpy(x, p->x, walk->d * sizeof *x);
    fw_base_velocity(&walk->base, p->w, v);
    return FW_OK;
}

/* ---- reading ------------------------------------------------------------------------------------------------------- */

void fw_chain_point(const fw_chain *chain, double *x, double *gradient, double *log_density)
{
    if (x) memcpy(x, chain->x, chain->walk.d * sizeof(double));
    if (gradient) memcpy(gradient, chain->g, chain->walk.d * sizeof(double));
    if (log_density) *log_density = chain->value;
}

void fw_chain_failed_at(const fw_chain *chain, double *x)
{
    memcpy(x, chain->walk.failed_at, chain->walk.d * sizeof(double));
}

void fw_chain_summary(const fw_chain *chain, fw_summary *out)
{
    const fw_learn *learn = &chain->learn;
    *out = (fw_summary){
        .gradients = chain->walk.gradients,
        .products = chain->walk.products,
        .transitions = chain->transitions,
        .settled_transitions = learn->done,
        .windows = learn->windows,
        .step_size = learn->settled ? chain->step_size : exp(learn->log_step),
        .beta = chain->walk.beta,
        .bend = learn->bend,
        .ceiling = learn->ceiling,
        .change = learn->change,
        .directions = chain->walk.base.k,
        .steps = chain->path == &fw_jittered ? fw_length_steps(chain, exp(learn->log_average)) : 0,
        .workspace_vectors = chain->vectors,
        .workspace_bytes = chain->bytes,
        .started = chain->started != 0,
        .settled = learn->settled != 0,
    };
}
