/* Many independent starts, a few transitions each: the ends have the law of the starts when the kernel is exact. */
#include "harness.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

/* ---- random numbers: xoshiro256++ (Blackman & Vigna 2021), its state from splitmix64; polar normals ------------------ */

static uint64_t rotated(uint64_t x, int by) { return (x << by) | (x >> (64 - by)); }

void stream_begin(stream *r, uint64_t number)
{
    for (int i = 0; i < 4; ++i) {
        uint64_t z = number += UINT64_C(0x9e3779b97f4a7c15);
        z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
        z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
        r->s[i] = z ^ (z >> 31);
    }
    r->has_spare = 0;
}

double stream_uniform(void *state)
{
    uint64_t *s = ((stream *)state)->s;
    const uint64_t out = rotated(s[0] + s[3], 23) + s[0], t = s[1] << 17;
    s[2] ^= s[0];
    s[3] ^= s[1];
    s[1] ^= s[2];
    s[0] ^= s[3];
    s[2] ^= t;
    s[3] = rotated(s[3], 45);
    return (double)(out >> 11) * 0x1p-53;
}

double stream_normal(stream *r)
{
    if (r->has_spare) {
        r->has_spare = 0;
        return r->spare;
    }
    double a, b, q;
    do {
        a = 2.0 * stream_uniform(r) - 1.0;
        b = 2.0 * stream_uniform(r) - 1.0;
        q = a * a + b * b;
    } while (q >= 1.0 || q == 0.0);
    const double k = sqrt(-2.0 * log(q) / q);
    r->spare = b * k;
    r->has_spare = 1;
    return a * k;
}

/* Marsaglia & Tsang (2000) */
double stream_gamma(stream *r, double shape)
{
    const double d = shape - 1.0 / 3.0, c = 1.0 / sqrt(9.0 * d);
    for (;;) {
        const double z = stream_normal(r), v = 1.0 + c * z;
        if (v <= 0.0) continue;
        const double cube = v * v * v;
        if (log(1.0 - stream_uniform(r)) < 0.5 * z * z + d - d * cube + d * log(cube)) return d * cube;
    }
}

static void normals(void *state, size_t n, double *out)
{
    for (size_t i = 0; i < n; ++i) out[i] = stream_normal(state);
}

/* ---- chains ---------------------------------------------------------------------------------------------------------- */

static fw_settings settings_of(const plan *how)
{
    return (fw_settings){
        .motion = how->motion,
        .path = how->path,
        .scheme = (fw_scheme)how->scheme,
        .curvature = (fw_curvature)how->curvature,
        .beta = how->beta,
        .steps = how->steps,
        .doublings = how->doublings,
        .turn = (fw_turn)how->turn,
        .halvings = how->halvings,
        .halving_bound = how->halving_bound,
        .step_size = how->step_size,
        .acceptance = 0.8,
        .rank = how->rank,
        .rank_fixed = 1,
    };
}

fw_chain *plan_chain(const plan *how, const fw_target *target, stream *r, int *status)
{
    const fw_settings settings = settings_of(how);
    const fw_random random = {normals, stream_uniform, NULL, r};
    fw_chain *chain = NULL;
    *status = fw_chain_new(target, &random, &settings, &chain);
    if (*status == FW_OK) *status = fw_chain_set_base(chain, how->scale, how->rank, how->directions, how->lambda);
    if (*status == FW_OK && fw_chain_settled(chain)) return chain;
    if (*status == FW_OK) *status = FW_BAD_STATE;
    fw_chain_free(chain);
    return NULL;
}

fw_chain *settling_chain(const plan *how, const fw_target *target, stream *r, size_t settle)
{
    fw_settings settings = settings_of(how);
    settings.beta = -1.0;
    settings.bend = 1.0;
    settings.step_size = 0.0;
    settings.settle_least = settings.settle_most = settle;
    settings.rank_fixed = 0;
    settings.adapt_step = settings.adapt_scale = 1;
    const fw_random random = {normals, stream_uniform, NULL, r};
    fw_chain *chain = NULL;
    return fw_chain_new(target, &random, &settings, &chain) == FW_OK ? chain : NULL;
}

void add_facts(totals *sum, const fw_facts *facts, size_t n)
{
    for (size_t i = 0; i < n; ++i) {
        sum->acceptance += facts[i].acceptance;
        sum->steps += facts[i].steps;
        sum->gradients += facts[i].gradients;
        sum->products += facts[i].products;
        sum->failures += facts[i].failure != 0;
    }
}

/* Step size, beta and base metric, bit for bit. */
static int settings_moved(const fw_chain *chain, const plan *how, size_t d, double *scratch)
{
    fw_summary now;
    fw_chain_summary(chain, &now);
    if (memcmp(&now.step_size, &how->step_size, sizeof(double)) || now.settled == 0) return 1;
    if (memcmp(&now.beta, &how->beta, sizeof(double))) return 1;
    double *directions = scratch + d, lambda[FW_MAX_DIRECTIONS];
    if (fw_chain_base(chain, scratch, directions, lambda) != how->rank) return 1;
    for (size_t i = 0; i < d; ++i) {
        const double root = sqrt(how->scale[i]), square = root * root; /* the core keeps the root */
        if (memcmp(&scratch[i], &square, sizeof(double))) return 1;
    }
    return how->rank > 0 && (memcmp(directions, how->directions, how->rank * d * sizeof(double)) != 0 ||
                             memcmp(lambda, how->lambda, how->rank * sizeof(double)) != 0);
}

/* x holds `starts` points of d numbers and is overwritten by where `transitions` transitions take each. */
EXPORT void run_from_starts(const plan *how, size_t d, fw_density density, fw_hessian_product product, void *context,
                            size_t starts, size_t transitions, uint64_t number, double *x, totals *sum)
{
    const fw_target target = {d, density, context, product, context};
    stream r;
    stream_begin(&r, number);
    memset(sum, 0, sizeof *sum);
    fw_chain *chain = plan_chain(how, &target, &r, &sum->status);
    fw_facts *facts = calloc(transitions, sizeof *facts);
    double *scratch = calloc((1 + FW_MAX_DIRECTIONS) * d, sizeof *scratch);
    for (size_t i = 0; sum->status == FW_OK && facts && scratch && i < starts; ++i) {
        size_t done = 0;
        fw_output output = {.facts = facts};
        sum->status = fw_chain_start(chain, x + i * d);
        if (sum->status == FW_OK) sum->status = fw_chain_run(chain, transitions, &output, &done);
        if (sum->status != FW_OK) break;
        memcpy(scratch, x + i * d, d * sizeof *x);
        fw_chain_point(chain, x + i * d, NULL, NULL);
        sum->moved += memcmp(scratch, x + i * d, d * sizeof *x) != 0;
        add_facts(sum, facts, done);
    }
    if (!facts || !scratch) sum->status = FW_NO_MEMORY;
    if (sum->status == FW_OK) sum->settings_moved = settings_moved(chain, how, d, scratch);
    free(scratch);
    free(facts);
    fw_chain_free(chain);
}
