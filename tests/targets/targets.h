/* Shared pieces of the test densities.
 *
 * Every density has the callback type
 *     int f(size_t d, const double *x, double *value, double *gradient, void *context)
 * and every exact Hessian product
 *     int hp(size_t d, const double *x, const double *p, double *product, void *context).
 * They return 0 when the outputs are written and 1 outside the support, where nothing is written; a negative code
 * ("stop now") comes only from the failing normal, on request. `context` points to an array of doubles owned by the
 * caller; the comment above each function gives its layout. Arrays never overlap.
 *
 * Sums run in eight fixed lanes: the compiler may then use vector registers without being allowed to reorder
 * floating-point additions, and the bits do not depend on what it chose.
 */
#ifndef TEST_TARGETS_H
#define TEST_TARGETS_H

#include <math.h>
#include <stddef.h>

#define LANES 8

#ifdef _WIN32
#define EXPORT __declspec(dllexport)
#else
#define EXPORT __attribute__((visibility("default")))
#endif

#define DENSITY(name) \
    EXPORT int name(size_t d, const double *restrict x, double *restrict value, double *restrict gradient, \
                    void *context)
#define PRODUCT(name) \
    EXPORT int name(size_t d, const double *restrict x, const double *restrict p, double *restrict product, \
                    void *context)
#define UNUSED(argument) ((void)(argument))

static inline double lane_sum(const double a[LANES])
{
    return ((a[0] + a[1]) + (a[2] + a[3])) + ((a[4] + a[5]) + (a[6] + a[7]));
}

static inline double sum(size_t n, const double *restrict a)
{
    double lane[LANES] = {0.0};
    size_t i = 0;
    for (; i + LANES <= n; i += LANES)
        for (size_t j = 0; j < LANES; j++)
            lane[j] += a[i + j];
    double total = lane_sum(lane);
    for (; i < n; i++)
        total += a[i];
    return total;
}

static inline double dot(size_t n, const double *a, const double *b)
{
    double lane[LANES] = {0.0};
    size_t i = 0;
    for (; i + LANES <= n; i += LANES)
        for (size_t j = 0; j < LANES; j++)
            lane[j] += a[i + j] * b[i + j];
    double total = lane_sum(lane);
    for (; i < n; i++)
        total += a[i] * b[i];
    return total;
}

#endif
