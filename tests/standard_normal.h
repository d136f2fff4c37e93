/* For programs of tests: a standard normal density, and random numbers that are always the same. */
#include <stddef.h>

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
