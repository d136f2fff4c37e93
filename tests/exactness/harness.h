/* What the exactness tests run in C: chains of the core on a given target, with random numbers of their own. */
#ifndef EXACTNESS_HARNESS_H
#define EXACTNESS_HARNESS_H

#include "fellwalk.h"

#if defined(_WIN32)
#define EXPORT __declspec(dllexport)
#else
#define EXPORT __attribute__((visibility("default")))
#endif

/* One combination with every setting fixed; mirrored by `Plan` in build.py. */
typedef struct plan {
    const char *motion, *path;
    int32_t scheme, curvature, turn;
    uint32_t steps, doublings, halvings, rank;
    double beta, step_size, halving_bound;
    const double *scale, *directions, *lambda; /* d, rank x d, rank */
} plan;

/* Sums over all transitions of a run. */
typedef struct totals {
    double acceptance, steps, gradients, products, failures, moved;
    int32_t settings_moved; /* 1: step size, beta, base metric or the bytes of the settled part are not what they were */
    int32_t status;
} totals;

typedef struct stream {
    uint64_t s[4];
    double spare;
    int has_spare;
} stream;

void stream_begin(stream *r, uint64_t number);
double stream_uniform(void *state);                      /* [0, 1) */
double stream_normal(stream *r);
double stream_gamma(stream *r, double shape);            /* rate 1, shape >= 1 */

/* A chain of the plan with its base metric set; NULL and *status otherwise. */
fw_chain *plan_chain(const plan *how, const fw_target *target, stream *r, int *status);
/* A chain that adapts everything over `settle` transitions, from a bend of 1; NULL when refused. */
fw_chain *settling_chain(const plan *how, const fw_target *target, stream *r, size_t settle);
void add_facts(totals *sum, const fw_facts *facts, size_t n);

#endif
