/* The no-U-turn path: doubling in random directions until the orbit turns back on itself.
 *
 * Hoffman & Gelman 2014; multinomial weights and generalised turn test, Betancourt 2013, 2017. The log weight of a
 * state is (energy at the start) - energy + log-Jacobian of the map from the start, on both sides. The choice is
 * biased towards the newest half only between the old orbit and the new half; inside the new half it is plain
 * multinomial, drawn as the states come.
 *
 * The new half is a binary tree whose finished pieces wait one per level, so memory is a few vectors per doubling.
 * A joined piece must not turn as a whole nor across its seam. Velocities and momenta are whitened: their products
 * are those of v with p = G0 v. With FW_TURN_METRIC momenta are those of the full metric, p = G v; then the tests
 * at the inner ends of a seam are left out on both sides, which keeps the rule the same from either end and the
 * memory at four vectors a level.
 */
#include <math.h>

#include "chain.h"
#include "kernels.h"

static const double widest = 1000.0; /* log weights along one orbit */

typedef struct orbit {
    double start;            /* energy at the start */
    double shift;            /* weights are exp(log weight - shift) */
    double low, high;        /* log weights met */
    double held_sum, fresh_sum;
    double accept_sum;
    int held_moved;          /* 1: the held candidate is no longer the start */
} orbit;

static void swap(double **a, double **b)
{
    double *t = *a;
    *a = *b;
    *b = t;
}

static void keep(fw_chain *chain, fw_candidate *to, const fw_point *p)
{
    fw_copy(chain->walk.d, p->x, to->x);
    fw_copy(chain->walk.d, p->g, to->g);
    to->value = p->value;
    to->energy = p->energy;
}

/* Weigh the new state p and let it stand for the new half with its share of the weight. */
static int weigh(fw_chain *chain, orbit *o, const fw_point *p, int first)
{
    const double log_weight = o->start - p->energy + p->log_jacobian;
    if (log_weight < o->low) o->low = log_weight;
    if (log_weight > o->high) o->high = log_weight;
    if (!(o->high - o->low <= widest)) {
        fw_walk_failed(&chain->walk, p->x);
        return FW_WEIGHT_RANGE;
    }
    if (log_weight - o->shift > 600.0) { /* keeps every sum finite; the old ones may vanish against the new */
        const double factor = exp(o->shift - log_weight);
        o->held_sum *= factor;
        o->fresh_sum *= factor;
        o->shift = log_weight;
    }
    const double weight = exp(log_weight - o->shift);
    o->accept_sum += log_weight >= 0.0 ? 1.0 : o->shift == 0.0 ? weight : exp(log_weight);
    o->fresh_sum += weight;
    if (first || chain->random.uniform(chain->random.state) * o->fresh_sum < weight) keep(chain, &chain->fresh, p);
    return FW_OK;
}

static int by_metric(const fw_chain *chain) { return chain->settings.turn == FW_TURN_METRIC; }

/* What stands for the momentum of a state in the turn test: the same rule for every state of an orbit. */
static void tested_momentum(const fw_chain *chain, const fw_point *p, double *out)
{
    const fw_walk *walk = &chain->walk;
    fw_copy(walk->d, p->w, out);
    if (by_metric(chain)) fw_axpy(walk->d, walk->motion->momentum(walk, p), p->c, out);
}

static int onward(const fw_chain *chain, const double sums[6])
{
    if (!(sums[0] > 0.0 && sums[1] > 0.0 && sums[2] > 0.0 && sums[5] > 0.0)) return 0;
    return by_metric(chain) || (sums[3] > 0.0 && sums[4] > 0.0);
}

/* Join the piece waiting at `level` (A) with the carried one (B, which ends at p). 0: the joined piece turns. */
static int join(fw_chain *chain, unsigned level, const fw_point *p)
{
    const size_t d = chain->walk.d;
    const int metric = by_metric(chain);
    fw_piece *a = &chain->level[level], *b = &chain->carry;
    double sums[6];
    if (!metric && level == 0) { /* two single states: one product of velocities decides every test */
        fw_add_pair(d, a->first, p->w, b->rho, sums);
        swap(&a->first, &b->first);
        return sums[1] + sums[0] > 0.0 && p->ww + sums[0] > 0.0;
    }
    const double *first_p = metric ? b->first_p : b->first;
    fw_seam(d, a->first, a->last, a->last, a->rho, b->first, p->w, first_p, b->rho, chain->spare_rho, sums);
    swap(&b->rho, &chain->spare_rho);
    swap(&a->first, &b->first);
    if (metric) swap(&a->first_p, &b->first_p);
    return onward(chain, sums);
}

/* The carried piece, which ends at p, waits at `level`. */
static void wait_at(fw_chain *chain, unsigned level, const fw_point *p)
{
    fw_piece *a = &chain->level[level], *b = &chain->carry;
    if (!by_metric(chain) && level == 0) {
        fw_copy(chain->walk.d, p->w, a->first);
        return;
    }
    swap(&a->first, &b->first);
    swap(&a->rho, &b->rho);
    if (by_metric(chain)) swap(&a->first_p, &b->first_p);
    tested_momentum(chain, p, a->last);
}

/* A single state as the carried piece. The plain base test needs none: it reads level 0 straight from the point. */
static void carry_state(fw_chain *chain, const fw_point *p)
{
    const size_t d = chain->walk.d;
    fw_piece *b = &chain->carry;
    if (!by_metric(chain)) return;
    tested_momentum(chain, p, b->first_p);
    fw_copy(d, b->first_p, b->rho);
    fw_copy(d, p->w, b->first);
}

/* 2^depth new states beyond end p. FW_OK with *turned, or the status of a failed step. */
static int extend(fw_chain *chain, orbit *o, fw_point *p, double step, unsigned depth, fw_facts *facts, int *turned)
{
    const size_t count = (size_t)1 << depth;
    o->fresh_sum = 0.0;
    for (size_t i = 0; i < count; ++i) {
        ++facts->steps;
        int status = fw_walk_step(&chain->walk, p, step);
        if (status == FW_OK) status = weigh(chain, o, p, i == 0);
        if (status != FW_OK) return status;
        carry_state(chain, p);
        unsigned level = 0;
        for (size_t bits = i; bits & 1; bits >>= 1, ++level)
            if (!join(chain, level, p)) {
                *turned = 1;
                return FW_OK;
            }
        if (i + 1 < count) wait_at(chain, level, p);
    }
    return FW_OK;
}

/* The old orbit and the new half as one piece; the sum of momenta becomes the orbit's. */
static int orbit_goes_on(fw_chain *chain, const fw_point *outer, const fw_point *p, unsigned depth)
{
    const size_t d = chain->walk.d;
    const fw_piece *b = &chain->carry;
    double sums[6];
    const int single = depth == 0 && !by_metric(chain);
    const double *first = single ? p->w : b->first, *rho = single ? p->w : b->rho;
    const double *first_p = by_metric(chain) ? b->first_p : first;
    fw_seam(d, outer->w, chain->seam, chain->seam, chain->orbit_rho, first, p->w, first_p, rho, chain->spare_rho, sums);
    swap(&chain->orbit_rho, &chain->spare_rho);
    return onward(chain, sums);
}

static int travel(fw_chain *chain, const fw_route *route, fw_facts *facts)
{
    fw_walk *walk = &chain->walk;
    const unsigned most = route->doublings + (route->finer ? 1u : 0u);
    orbit o = {.start = chain->end[0].energy, .held_sum = 1.0};
    fw_point_copy(walk, &chain->end[0], &chain->end[1]);
    tested_momentum(chain, &chain->end[0], chain->orbit_rho);
    facts->energy = o.start;
    for (unsigned depth = 0; depth < most; ++depth) {
        const int forward = chain->random.uniform(chain->random.state) < 0.5;
        fw_point *p = &chain->end[forward];
        const double step = forward ? route->step_size : -route->step_size;
        int turned = 0;
        tested_momentum(chain, p, chain->seam);
        const int status = extend(chain, &o, p, step, depth, facts, &turned);
        if (status < 0) return status;
        facts->failure = status;
        if (status != FW_OK || turned) break;
        if (chain->random.uniform(chain->random.state) * o.held_sum < o.fresh_sum) {
            const fw_candidate t = chain->held;
            chain->held = chain->fresh;
            chain->fresh = t;
            o.held_moved = 1;
        }
        o.held_sum += o.fresh_sum;
        if (!orbit_goes_on(chain, &chain->end[!forward], p, depth)) break;
    }
    facts->log_weight_range = o.high - o.low;
    facts->acceptance = o.accept_sum / facts->steps;
    if (o.held_moved) {
        facts->energy = chain->held.energy;
        fw_chain_take(chain, chain->held.x, chain->held.g, chain->held.value);
    }
    return FW_OK;
}

const fw_path fw_nouturn = {
    .name = "no-u-turn",
    .source = "Hoffman & Gelman 2014, JMLR 15; Betancourt 2017, arXiv 1701.02434",
    .travel = travel,
};
