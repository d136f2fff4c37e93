/* A standard normal that takes at least the time its context says, in nanoseconds: a costly model of a known law. */
#define _POSIX_C_SOURCE 199309L
#include <stddef.h>
#include <time.h>

static double now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_THREAD_CPUTIME_ID, &t);
    return 1e9 * (double)t.tv_sec + (double)t.tv_nsec;
}

int slow_normal(size_t d, const double *x, double *value, double *gradient, void *context)
{
    const double until = now() + *(const double *)context;
    double total = 0.0;
    for (size_t i = 0; i < d; ++i) {
        total += x[i] * x[i];
        gradient[i] = -x[i];
    }
    *value = -0.5 * total;
    while (now() < until) continue;
    return 0;
}
