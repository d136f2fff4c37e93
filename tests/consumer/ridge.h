/* An invented density: a bent ridge. x0 ~ N(0, 1); every other coordinate, given x0, ~ N(bend (x0^2 - 1), width^2).
 * Means 0; variances 1, and 2 bend^2 + width^2. */
#ifndef RIDGE_H
#define RIDGE_H

#include <stddef.h>

typedef struct ridge_data {
    double bend, width;
} ridge_data;

/* A density as fellwalk.h wants them; context is a ridge_data. */
int ridge(size_t d, const double *x, double *value, double *gradient, void *context);

#endif
