/* A density in any dimension, steeper than a normal, that breaks in one way at one call; breaking.py has the same. */
#include <math.h>
#include <stddef.h>
#include <stdint.h>

/* calls so far; the call that breaks (0: none) and how: the place in ACTS of breaking.py; where it was made: d numbers. */
typedef struct {
    int64_t calls, breaks_at, act;
    double *at;
} plan;

int breaking(size_t d, const double *x, double *value, double *gradient, void *context)
{
    plan *p = context;
    const int64_t act = ++p->calls == p->breaks_at ? p->act : -1;
    double sum = 0.0;
    if (act >= 0)
        for (size_t i = 0; i < d; ++i) p->at[i] = x[i];
    if (act == 0) return -7;
    if (act == 1) return 3;
    if (act == 2) return 0;
    for (size_t i = 0; i < d; ++i) {
        sum += x[i] * x[i] * (0.5 + 0.025 * x[i] * x[i]);
        gradient[i] = -x[i] * (1.0 + 0.1 * x[i] * x[i]);
    }
    *value = -sum;
    if (act == 3) *value = -INFINITY;
    if (act == 4) *value = NAN;
    if (act == 5) *value = INFINITY;
    if (act == 6) gradient[d - 1] = NAN;
    if (act == 7) gradient[d / 2] = INFINITY;
    if (act == 8) {
        *value = -1.79769313e308;
        gradient[0] = 1e153;
    }
    if (act == 9) *value -= 1e5;
    return 0;
}
