/* Counts what the passes of a step move: compiled with every call of a kernel, outside kernels.c, counted by macros that
 * the test writes. The density is a standard normal. */
#include "fellwalk.h"

#define EXPORT __attribute__((visibility("default")))

EXPORT long moved;

static int density(size_t d, const double *x, double *value, double *gradient, void *context)
{
    (void)context;
    *value = 0.0;
    for (size_t i = 0; i < d; ++i) {
        *value -= 0.5 * x[i] * x[i];
        gradient[i] = -x[i];
    }
    return 0;
}

static int product(size_t d, const double *x, const double *p, double *out, void *context)
{
    (void)x;
    (void)context;
    for (size_t i = 0; i < d; ++i) out[i] = -p[i];
    return 0;
}

static void normals(void *state, size_t n, double *out)
{
    (void)state;
    for (size_t i = 0; i < n; ++i) out[i] = 1.0;
}

static double uniform(void *state)
{
    (void)state;
    return 0.5;
}

/* Vectors moved by `steps` steps beyond those of none; negative: a status. */
EXPORT long counted(const char *motion, int scheme, int curvature, size_t d, size_t steps)
{
    const fw_target target = {d, density, NULL, product, NULL};
    const fw_random random = {normals, uniform, NULL, NULL};
    const fw_settings settings = {
        .motion = motion, .path = "jittered", .scheme = (fw_scheme)scheme, .curvature = (fw_curvature)curvature,
        .beta = 0.05, .steps = 4, .doublings = 4, .halving_bound = 1.0, .acceptance = 0.8, .step_size = 0.1,
    };
    double x[64], v[64];
    long marks[2] = {0, 0};
    for (int i = 0; i < 2; ++i) {
        fw_chain *chain;
        fw_path_out out = {0};
        int status = fw_chain_new(&target, &random, &settings, &chain);
        if (status != FW_OK) return status < 0 ? status : -status;
        for (size_t j = 0; j < d; ++j) x[j] = 0.3 + 0.01 * (double)j, v[j] = j % 2 ? x[j] : -x[j];
        const long before = moved;
        status = fw_chain_integrate(chain, x, v, 0.1, i * steps, &out);
        marks[i] = moved - before;
        fw_chain_free(chain);
        if (status != FW_OK) return status < 0 ? status : -status;
    }
    return marks[1] - marks[0];
}
