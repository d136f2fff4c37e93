/* Gives the search for learned directions a window that the caller has made: rows, means and the base metric before. */
#include <stdint.h>
#include <string.h>

#include "chain.h"
#include "standard_normal.h"

#define EXPORT __attribute__((visibility("default")))

typedef struct harness_window {
    size_t d, m, k; /* numbers of a draw, draws, directions of the base metric before */
    unsigned rank;
    int rank_fixed;
    const double *x, *g;              /* m x d */
    const double *mean_x, *mean_g;    /* d */
    const double *scale_before;       /* d */
    const double *directions, *lambda; /* k x d, k */
} harness_window;

/* `times` searches over the same window; scale (d) is improved, found (rank x d) and variances (rank) are written.
 * Returns how many directions, or a status below 0. */
EXPORT long harness_directions(const harness_window *w, long times, double *scale, double *found, double *variances)
{
    const fw_target target = {w->d, density, NULL, NULL, NULL};
    const fw_random random = {normals, uniform, NULL, NULL};
    const fw_settings settings = {
        .motion = "leapfrog", .path = "jittered", .beta = 0.05, .steps = 4, .doublings = 4, .halving_bound = 1.0,
        .acceptance = 0.8, .settle_least = 100, .settle_most = 100, .rank = w->rank, .rank_fixed = w->rank_fixed,
        .adapt_step = 1, .adapt_scale = 1,
    };
    fw_chain *chain;
    int status = fw_chain_new(&target, &random, &settings, &chain);
    if (status != FW_OK) return status;
    if (w->m > chain->rows) status = FW_BAD_ARGUMENT;
    if (status == FW_OK) status = fw_chain_set_base(chain, w->scale_before, w->k, w->directions, w->lambda);
    long count = status;
    for (long i = 0; i < times && status == FW_OK; ++i) {
        const size_t row = w->d * sizeof(double);
        double *first = i + 1 < times ? chain->x : scale; /* a scale to spend, but in the last search */
        if (i + 1 < times) memcpy(first, scale, row);
        memcpy(chain->rows_x, w->x, w->m * row);
        memcpy(chain->rows_g, w->g, w->m * row);
        memcpy(chain->mean_x, w->mean_x, row);
        memcpy(chain->mean_g, w->mean_g, row);
        chain->learn.rows = w->m;
        count = (long)fw_find_directions(chain, first, chain->found, variances);
    }
    if (count > 0) memcpy(found, chain->found, (size_t)count * w->d * sizeof(double));
    fw_chain_free(chain);
    return count;
}

#ifdef HARNESS_MAIN
#include <stdio.h>

/* Windows of every size on both sides of every edge, with directions asked for and with those that stand out. */
int harness_windows(void);
int harness_windows(void)
{
    static const size_t dimensions[] = {1, 2, 10, 17, 31, 32, 33, 60, 61, 144, 145}, rows[] = {8, 20, 64};
    enum { most = 145 * 64, directions = 16 };
    static double x[most], g[most], mean[145], scale[145], ones[145], found[145 * directions], variances[directions];
    static double known[2 * 145];
    int count = 0;
    uint64_t seed = 1;
    for (size_t i = 0; i < 145; ++i) ones[i] = 1.0;
    for (size_t a = 0; a < sizeof dimensions / sizeof *dimensions; ++a)
        for (size_t b = 0; b < sizeof rows / sizeof *rows; ++b)
            for (int fixed = 0; fixed < 2; ++fixed) {
                const size_t d = dimensions[a], m = rows[b], k = d > 3 && fixed ? 2 : 0;
                for (size_t i = 0; i < m * d; ++i) {
                    seed = seed * UINT64_C(6364136223846793005) + UINT64_C(1442695040888963407); /* Knuth's */
                    x[i] = (double)(seed >> 11) * 0x1p-53 - 0.5;
                    if (i % d == 1) x[i] += 9.0 * x[i - 1]; /* a direction */
                    g[i] = -x[i];
                }
                for (size_t i = 0; i < k * d; ++i) known[i] = i == 0 || i == d + 1 ? 1.0 : 0.0;
                memcpy(scale, ones, sizeof scale);
                const harness_window w = {
                    .d = d, .m = m, .k = k, .rank = fixed ? 3 : directions, .rank_fixed = fixed, .x = x, .g = g,
                    .mean_x = mean, .mean_g = mean, .scale_before = ones, .directions = known, .lambda = ones,
                };
                const long of_this = harness_directions(&w, 1, scale, found, variances);
                if (of_this < 0 || (fixed && of_this != (long)(d < 4 ? d - 1 : 3))) {
                    printf("%zu numbers, %zu rows: %ld\n", d, m, of_this);
                    return 1;
                }
                ++count;
            }
    printf("%d windows\n", count);
    return 0;
}
#endif
