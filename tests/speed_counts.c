/* Counts what the passes of a step move: compiled with every call of a kernel, outside kernels.c, counted by macros that
 * the test writes. The density is a standard normal. */
#include "fellwalk.h"
#include "standard_normal.h"

#define EXPORT __attribute__((visibility("default")))

EXPORT long moved;

static int product(size_t d, const double *x, const double *p, double *out, void *context)
{
    (void)x;
    (void)context;
    for (size_t i = 0; i < d; ++i) out[i] = -p[i];
    return 0;
}

static fw_chain *chain_of(const char *motion, int scheme, int curvature, size_t d, size_t most)
{
    const fw_target target = {d, density, NULL, product, NULL};
    const fw_random random = {normals, uniform, NULL, NULL};
    const fw_settings settings = {
        .motion = motion, .path = "jittered", .scheme = (fw_scheme)scheme, .curvature = (fw_curvature)curvature,
        .beta = 0.05, .steps = most, .doublings = 4, .halving_bound = 1.0, .acceptance = 0.8, .step_size = 0.1,
        .rank = 4,
    };
    fw_chain *chain = NULL;
    return fw_chain_new(&target, &random, &settings, &chain) == FW_OK ? chain : NULL;
}

/* Vectors moved by `rows` calls of `steps` steps each beyond those of as many calls of `fewer`, over a base metric with
 * `learned` directions; negative: a failure. */
EXPORT long counted(const char *motion, int scheme, int curvature, size_t d, size_t rows, size_t steps, size_t fewer,
                    size_t learned)
{
    double x[64], v[64], directions[4 * 64] = {0}, lambda[4] = {0.5, 2.0, 3.0, 4.0};
    long marks[2] = {0, 0};
    for (int i = 0; i < 2; ++i) {
        fw_chain *chain = chain_of(motion, scheme, curvature, d, 4);
        fw_path_out out = {0};
        int status = chain ? FW_OK : FW_BAD_ARGUMENT;
        for (size_t j = 0; j < d; ++j) x[j] = 1.0;
        for (size_t j = 0; j < learned; ++j) directions[j * d + j] = 1.0;
        if (status == FW_OK) status = fw_chain_set_base(chain, x, learned, directions, lambda);
        for (size_t j = 0; j < d; ++j) x[j] = 0.3 + 0.01 * (double)j, v[j] = j % 2 ? x[j] : -x[j];
        const long before = moved;
        for (size_t j = 0; j < rows && status == FW_OK; ++j)
            status = fw_chain_integrate(chain, x, v, 0.1, i ? steps : fewer, &out);
        marks[i] = moved - before;
        fw_chain_free(chain);
        if (status != FW_OK) return status < 0 ? status : -status;
    }
    return marks[1] - marks[0];
}

/* Vectors moved by a transition on a jittered path of 1 + most / 2 steps; negative: a failure. */
EXPORT long counted_path(const char *motion, size_t d, size_t most)
{
    fw_chain *chain = chain_of(motion, 0, 0, d, most);
    double x[64];
    size_t done;
    fw_facts facts = {0};
    fw_output out = {.facts = &facts};
    for (size_t j = 0; j < d; ++j) x[j] = 0.3 + 0.01 * (double)j;
    int status = chain ? fw_chain_start(chain, x) : FW_BAD_ARGUMENT;
    const long before = moved;
    if (status == FW_OK) status = fw_chain_run(chain, 1, &out, &done);
    const long found = moved - before;
    fw_chain_free(chain);
    return status == FW_OK && facts.failure == 0 && facts.steps == (int32_t)(1 + most / 2) ? found : -1;
}
