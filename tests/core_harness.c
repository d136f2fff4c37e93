/* Runs chains of the core without Python: for comparing builds, failing allocations, and memory checkers.
 *
 * The random numbers are SplitMix64 (Steele, Lea & Flood 2014) with the Box-Muller map: the same on every build.
 * With HARNESS_ALLOCATIONS the core's calloc and free (renamed on the command line) count what is live and fail on
 * request. With HARNESS_MAIN there is a program that runs a few chains of every kind.
 */
#include <math.h>
#include <stdint.h>

#include "fellwalk.h"

#define EXPORT __attribute__((visibility("default")))

static uint64_t next(uint64_t *s)
{
    uint64_t z = (*s += UINT64_C(0x9e3779b97f4a7c15));
    z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
    return z ^ (z >> 31);
}

static double uniform(void *state) { return (double)(next(state) >> 11) * 0x1p-53; }

static void normals(void *state, size_t n, double *out)
{
    for (size_t i = 0; i < n; ++i) {
        const double radius = sqrt(-2.0 * log(1.0 - uniform(state)));
        out[i] = radius * cos(6.283185307179586 * uniform(state));
    }
}

typedef struct harness_case {
    size_t d;
    fw_density density;
    void *density_context;
    fw_hessian_product product;
    void *product_context;
    const char *motion, *path;
    int scheme, curvature, turn, rank;
    double bend;
    unsigned doublings, halvings;
    size_t steps, settle, keep;
    uint64_t seed;
} harness_case;

EXPORT size_t harness_case_bytes(void) { return sizeof(harness_case); }

/* Settle from x, however many transitions that takes, then keep: *rows is the room in draws, gradients (both with d
 * numbers a row) and facts, then what was used. In the middle of the kept part the chain is exported, into state (of
 * room bytes) and its size into *size, and imported by another one, which goes on; state becomes that one's at the
 * end. Returns a status. */
EXPORT int harness_run(const harness_case *c, const double *x, double *draws, double *gradients, fw_facts *facts,
                       size_t *rows, unsigned char *state, size_t room, size_t *size)
{
    uint64_t stream = c->seed;
    const fw_target target = {c->d, c->density, c->density_context, c->product, c->product_context};
    const fw_random random = {normals, uniform, NULL, &stream};
    const fw_settings settings = {
        .motion = c->motion, .path = c->path, .scheme = (fw_scheme)c->scheme, .curvature = (fw_curvature)c->curvature,
        .bend = c->bend, .beta = -1.0, .steps = c->steps, .doublings = c->doublings, .turn = (fw_turn)c->turn,
        .halvings = c->halvings, .halving_bound = 1.0, .acceptance = 0.8, .settle_least = c->settle,
        .settle_most = c->settle, .rank = (unsigned)c->rank, .adapt_step = 1, .adapt_scale = 1,
        .step_size = c->settle ? 0.0 : 0.5,
    };
    fw_chain *chain = NULL, *other = NULL;
    size_t done = 0, total = 0;
    const size_t parts[] = {c->settle ? *rows - c->keep : 0, c->keep / 2, c->keep - c->keep / 2};
    int status = fw_chain_new(&target, &random, &settings, &chain);
    if (status == FW_OK) status = fw_chain_new(&target, &random, &settings, &other);
    if (status == FW_OK) status = fw_chain_start(chain, x);
    for (int i = 0; i < 3 && status == FW_OK; ++i) {
        fw_output out = {.draws = draws + total * c->d, .gradients = gradients + total * c->d, .facts = facts + total};
        if (i > 0 && !fw_chain_settled(chain)) status = FW_BAD_ARGUMENT; /* *rows was too small */
        if (i == 2) {
            *size = fw_chain_state_bytes(chain);
            if (*size > room) status = FW_BAD_ARGUMENT;
            if (status == FW_OK) status = fw_chain_export(chain, state, *size);
            if (status == FW_OK) status = fw_chain_import(other, state, *size);
        }
        if (status == FW_OK) status = fw_chain_run(i == 2 ? other : chain, parts[i], &out, &done);
        total += done;
    }
    *rows = total;
    if (status == FW_OK) *size = fw_chain_state_bytes(other);
    if (status == FW_OK) status = fw_chain_export(other, state, *size);
    fw_chain_free(chain);
    fw_chain_free(other);
    return status;
}

#ifdef HARNESS_ALLOCATIONS
#include <stdlib.h>
static size_t live, made, fail_at;
void *harness_calloc(size_t n, size_t size);
void harness_free(void *block);

void *harness_calloc(size_t n, size_t size)
{
    if (++made == fail_at) return NULL;
    void *block = calloc(n, size);
    if (block) ++live;
    return block;
}

void harness_free(void *block)
{
    if (block) --live;
    free(block);
}

/* From here on the n-th allocation (from 1) fails; 0: none. */
EXPORT void harness_fail(size_t n)
{
    made = 0;
    fail_at = n;
}
EXPORT size_t harness_live(void) { return live; }
EXPORT size_t harness_made(void) { return made; }
#endif

#ifdef HARNESS_MAIN
#include <stdio.h>
#include <stdlib.h>
int student(size_t d, const double *x, double *value, double *gradient, void *context);
int student_product(size_t d, const double *x, const double *p, double *product, void *context);
int one_sided(size_t d, const double *x, double *value, double *gradient, void *context);
int one_sided_product(size_t d, const double *x, const double *p, double *product, void *context);

int harness_windows(void); /* window_harness.c */

enum { room = 1 << 16, most = 500 };

static int run(size_t d, int motion, int scheme, int curvature, int path, unsigned halvings, int bounded)
{
    double student_context[] = {0.0, 5.0, 1.0, 0.0}, *edge_context = calloc(1 + 2 * d, sizeof(double));
    double *x = calloc(d, sizeof *x), *draws = calloc(most * d, sizeof *x), *gradients = calloc(most * d, sizeof *x);
    fw_facts facts[most];
    unsigned char *state = malloc(room);
    size_t size, rows = most;
    if (!edge_context || !x || !draws || !gradients || !state) return FW_NO_MEMORY;
    for (size_t i = 0; i < d; ++i) {
        x[i] = 0.3 + 0.1 * (double)i;
        edge_context[1 + i] = 1.3;
    }
    const char *const names[] = {"leapfrog", "lagrangian", "isokinetic"};
    const harness_case c = {
        .d = d, .density = bounded ? one_sided : student, .product = bounded ? one_sided_product : student_product,
        .density_context = bounded ? edge_context : student_context,
        .product_context = bounded ? edge_context : student_context,
        .motion = names[motion], .path = path ? "no-u-turn" : "jittered", .scheme = scheme,
        .curvature = curvature, .turn = scheme, .bend = 0.7, .doublings = 5, .halvings = halvings, .steps = 5,
        .settle = 40, .keep = 20, .rank = path ? 2 : 0, .seed = 7,
    };
    const int status = harness_run(&c, x, draws, gradients, facts, &rows, state, room, &size);
    free(edge_context);
    free(x);
    free(draws);
    free(gradients);
    free(state);
    return status;
}

int main(void)
{
    int count = 0;
    for (int motion = 0; motion < 3; ++motion)
        for (int scheme = 0; scheme < (motion == 1 ? 2 : 1); ++scheme)
            for (int curvature = 0; curvature < (motion == 1 ? 3 : 1); ++curvature)
                for (int path = 0; path < 2; ++path)
                    for (unsigned halvings = 0; halvings < 4; halvings += 3)
                        for (int bounded = 0; bounded < 2; ++bounded)
                            for (size_t d = motion == 2 ? 2 : 1; d < 20; d += 8) {
                                const int status = run(d, motion, scheme, curvature, path, halvings, bounded);
                                ++count;
                                if (status != FW_OK) {
                                    printf("status %d: %s\n", status, fw_sentence(status));
                                    return 1;
                                }
                            }
    printf("%d chains\n", count);
    return harness_windows();
}
#endif
