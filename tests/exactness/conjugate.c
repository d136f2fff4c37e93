/* A normal sample with unknown mean and precision under their conjugate prior, with data redrawn:
 *     tau ~ Gamma(shape a, rate b), mu | tau ~ N(m, 1/(k tau)), y_1..y_n ~ N(mu, 1/tau);  x = (mu, log tau).
 * Two loops: successive-conditional simulation of the joint law (Geweke 2004, JASA 99) and ranks of the truth among
 * posterior draws (Talts, Betancourt, Simpson, Vehtari & Gelman 2018). */
#include <math.h>
#include <string.h>

#include "harness.h"

typedef struct model {
    double a, b, m, k, n; /* prior; number of data */
    double mean, squares; /* of the data: mean and sum of squares about it */
} model;

EXPORT int conjugate(size_t d, const double *x, double *value, double *gradient, void *context)
{
    const model *c = context;
    const double tau = exp(x[1]), away = x[0] - c->m, off = x[0] - c->mean;
    const double rate = c->b + 0.5 * (c->k * away * away + c->n * off * off + c->squares);
    const double power = c->a + 0.5 * (1.0 + c->n);
    if (d != 2 || !(tau < 1e100)) return d != 2 ? -1 : 1;
    *value = power * x[1] - tau * rate;
    gradient[0] = -tau * (c->k * away + c->n * off);
    gradient[1] = power - tau * rate;
    return 0;
}

EXPORT int conjugate_product(size_t d, const double *x, const double *p, double *product, void *context)
{
    const model *c = context;
    const double tau = exp(x[1]), away = x[0] - c->m, off = x[0] - c->mean;
    const double rate = c->b + 0.5 * (c->k * away * away + c->n * off * off + c->squares);
    const double cross = -tau * (c->k * away + c->n * off);
    if (d != 2) return -1;
    product[0] = -tau * (c->k + c->n) * p[0] + cross * p[1];
    product[1] = cross * p[0] - tau * rate * p[1];
    return 0;
}

static void draw_prior(const model *c, stream *r, double x[2])
{
    const double tau = stream_gamma(r, c->a) / c->b;
    x[0] = c->m + stream_normal(r) / sqrt(c->k * tau);
    x[1] = log(tau);
}

static void draw_data(model *c, stream *r, const double x[2])
{
    const double sd = exp(-0.5 * x[1]);
    c->mean = c->squares = 0.0;
    for (int i = 0; i < (int)c->n; ++i) { /* Welford's update */
        const double y = x[0] + sd * stream_normal(r), step = y - c->mean;
        c->mean += step / (i + 1);
        c->squares += step * (y - c->mean);
    }
}

static int transitions(fw_chain *chain, size_t n, double x[2])
{
    size_t done;
    const int status = fw_chain_run(chain, n, NULL, &done);
    fw_chain_point(chain, x, NULL, NULL);
    return status;
}

/* states: chains x rounds x 4 (mu, log tau, data mean, data squares). Each chain begins with a draw of the prior; a
 * round redraws the data and makes one transition. Returns a status. */
EXPORT int successive_conditional(const plan *how, const double prior[5], size_t chains, size_t rounds, uint64_t number,
                                  double *states)
{
    model c = {prior[0], prior[1], prior[2], prior[3], prior[4], 0.0, 0.0};
    const fw_target target = {2, conjugate, &c, conjugate_product, &c};
    stream r;
    stream_begin(&r, number);
    int status;
    fw_chain *chain = plan_chain(how, &target, &r, &status);
    for (size_t i = 0; status == FW_OK && i < chains; ++i) {
        double x[2];
        draw_prior(&c, &r, x);
        for (size_t j = 0; status == FW_OK && j < rounds; ++j, states += 4) {
            draw_data(&c, &r, x);
            status = fw_chain_start(chain, x);
            if (status == FW_OK) status = transitions(chain, 1, x);
            const double state[4] = {x[0], x[1], c.mean, c.squares};
            memcpy(states, state, sizeof state);
        }
    }
    fw_chain_free(chain);
    return status;
}

static double log_density(const double x[2], model *c)
{
    double value = -INFINITY, gradient[2];
    (void)conjugate(2, x, &value, gradient, c);
    return value;
}

/* ranks: replicates x 3, how many of `draws` posterior draws, `thin` transitions apart, lie below the truth in mu, in
 * log tau and in the posterior density. Each replicate begins at the prior's centre and forgets `lead` transitions. */
EXPORT int truth_ranks(const plan *how, const double prior[5], size_t replicates, size_t lead, size_t draws, size_t thin,
                       uint64_t number, int32_t *ranks)
{
    model c = {prior[0], prior[1], prior[2], prior[3], prior[4], 0.0, 0.0};
    const fw_target target = {2, conjugate, &c, conjugate_product, &c};
    stream r;
    stream_begin(&r, number);
    int status;
    fw_chain *chain = plan_chain(how, &target, &r, &status);
    for (size_t i = 0; status == FW_OK && i < replicates; ++i, ranks += 3) {
        double truth[2], x[2] = {c.m, log(c.a / c.b)};
        draw_prior(&c, &r, truth);
        draw_data(&c, &r, truth);
        const double level = log_density(truth, &c);
        status = fw_chain_start(chain, x);
        if (status == FW_OK) status = transitions(chain, lead, x);
        memset(ranks, 0, 3 * sizeof *ranks);
        for (size_t j = 0; status == FW_OK && j < draws; ++j) {
            status = transitions(chain, thin, x);
            ranks[0] += x[0] < truth[0];
            ranks[1] += x[1] < truth[1];
            ranks[2] += log_density(x, &c) < level;
        }
    }
    fw_chain_free(chain);
    return status;
}
