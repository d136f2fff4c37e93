/* Posterior densities of models with data: normal sample, linear and logistic regression, eight schools.
 * Predictors are stored column after column, so the loops run over the observations of one column; rows are taken
 * in blocks small enough for the stack. */
#include "targets.h"

#define BLOCK 64

/* [n, centre, sum of squares about the mean]: x = (mean - offset, log sd), prior 1 / sd, Jacobian of the log included */
DENSITY(normal_sample)
{
    UNUSED(d);
    const double *c = context, n = c[0], away = x[0] - c[1], shrink = exp(-2.0 * x[1]);
    const double half = 0.5 * (n * away * away + c[2]) * shrink;
    *value = -n * x[1] - half;
    gradient[0] = -n * away * shrink;
    gradient[1] = 2.0 * half - n;
    return 0;
}

PRODUCT(normal_sample_product)
{
    UNUSED(d);
    const double *c = context, n = c[0], away = x[0] - c[1], shrink = exp(-2.0 * x[1]);
    const double cross = 2.0 * n * away * shrink;
    product[0] = -n * shrink * p[0] + cross * p[1];
    product[1] = cross * p[0] - 2.0 * (n * away * away + c[2]) * shrink * p[1];
    return 0;
}

/* out = sum over columns j of coefficient[j] column j, for `rows` rows */
static void combine(size_t rows, size_t n, size_t columns, const double *restrict design,
                    const double *restrict coefficient, double *restrict out)
{
    for (size_t i = 0; i < rows; i++)
        out[i] = design[i] * coefficient[0];
    for (size_t j = 1; j < columns; j++)
        for (size_t i = 0; i < rows; i++)
            out[i] += design[j * n + i] * coefficient[j];
}

/* [n, response (n), design (d - 1 columns of n)]: x = (coefficients, log sd), prior 1 / sd, Jacobian included */
DENSITY(regression)
{
    const double *c = context;
    const size_t n = (size_t)c[0], columns = d - 1;
    const double *response = c + 1, *design = response + n;
    const double log_sd = x[columns], shrink = exp(-2.0 * log_sd);
    double residual[BLOCK], squares = 0.0;
    for (size_t j = 0; j < columns; j++)
        gradient[j] = 0.0;
    for (size_t start = 0; start < n; start += BLOCK) {
        const size_t rows = n - start < BLOCK ? n - start : BLOCK;
        combine(rows, n, columns, design + start, x, residual);
        for (size_t i = 0; i < rows; i++)
            residual[i] = response[start + i] - residual[i];
        squares += dot(rows, residual, residual);
        for (size_t j = 0; j < columns; j++)
            gradient[j] += shrink * dot(rows, design + j * n + start, residual);
    }
    *value = -(double)n * log_sd - 0.5 * squares * shrink;
    gradient[columns] = squares * shrink - (double)n;
    return 0;
}

PRODUCT(regression_product)
{
    const double *c = context;
    const size_t n = (size_t)c[0], columns = d - 1;
    const double *response = c + 1, *design = response + n;
    const double shrink = exp(-2.0 * x[columns]), along = p[columns];
    double residual[BLOCK], change[BLOCK], squares = 0.0, cross = 0.0;
    for (size_t j = 0; j < columns; j++)
        product[j] = 0.0;
    for (size_t start = 0; start < n; start += BLOCK) {
        const size_t rows = n - start < BLOCK ? n - start : BLOCK;
        combine(rows, n, columns, design + start, x, residual);
        combine(rows, n, columns, design + start, p, change);
        for (size_t i = 0; i < rows; i++)
            residual[i] = response[start + i] - residual[i];
        squares += dot(rows, residual, residual);
        cross += dot(rows, residual, change);
        for (size_t i = 0; i < rows; i++)
            change[i] += 2.0 * along * residual[i];
        for (size_t j = 0; j < columns; j++)
            product[j] -= shrink * dot(rows, design + j * n + start, change);
    }
    product[columns] = -2.0 * shrink * (cross + squares * along);
    return 0;
}

/* Turns eta into y - probability and returns sum log(1 + exp(eta)). The product of the factors 1 + exp(-|eta|) of a
 * block is at most 2^64, so one logarithm serves the block. */
static double logistic_block(size_t rows, double *eta, const double *response)
{
    double factors = 1.0, positive = 0.0;
    for (size_t i = 0; i < rows; i++) {
        const double z = exp(-fabs(eta[i])), inverse = 1.0 / (1.0 + z);
        factors *= 1.0 + z;
        positive += eta[i] > 0.0 ? eta[i] : 0.0;
        eta[i] = response[i] - (eta[i] > 0.0 ? inverse : z * inverse);
    }
    return positive + log(factors);
}

/* [n, prior precision, response 0 or 1 (n), design (d columns of n)] */
DENSITY(logistic)
{
    const double *c = context;
    const size_t n = (size_t)c[0];
    const double precision = c[1], *response = c + 2, *design = response + n;
    double work[BLOCK], total = -0.5 * precision * dot(d, x, x);
    for (size_t j = 0; j < d; j++)
        gradient[j] = -precision * x[j];
    for (size_t start = 0; start < n; start += BLOCK) {
        const size_t rows = n - start < BLOCK ? n - start : BLOCK;
        combine(rows, n, d, design + start, x, work);
        total += dot(rows, response + start, work);
        total -= logistic_block(rows, work, response + start);
        for (size_t j = 0; j < d; j++)
            gradient[j] += dot(rows, design + j * n + start, work);
    }
    *value = total;
    return 0;
}

PRODUCT(logistic_product)
{
    const double *c = context;
    const size_t n = (size_t)c[0];
    const double precision = c[1], *design = c + 2 + n;
    double eta[BLOCK], change[BLOCK];
    for (size_t j = 0; j < d; j++)
        product[j] = -precision * p[j];
    for (size_t start = 0; start < n; start += BLOCK) {
        const size_t rows = n - start < BLOCK ? n - start : BLOCK;
        combine(rows, n, d, design + start, x, eta);
        combine(rows, n, d, design + start, p, change);
        for (size_t i = 0; i < rows; i++) {
            const double z = exp(-fabs(eta[i])), sum_one = 1.0 + z;
            change[i] *= z / (sum_one * sum_one);
        }
        for (size_t j = 0; j < d; j++)
            product[j] -= dot(rows, design + j * n + start, change);
    }
    return 0;
}

/* [groups, observed (groups), 1 / error^2 (groups)]: x = (mu, log tau, theta), flat prior on (mu, tau) */
DENSITY(schools_centred)
{
    UNUSED(d);
    const double *c = context;
    const size_t groups = (size_t)c[0];
    const double *observed = c + 1, *precision = observed + groups, *theta = x + 2;
    const double shrink = exp(-2.0 * x[1]);
    double fit = 0.0, shift = 0.0, squares = 0.0;
    for (size_t j = 0; j < groups; j++) {
        const double miss = observed[j] - theta[j], away = theta[j] - x[0];
        fit += miss * miss * precision[j];
        shift += away;
        squares += away * away;
        gradient[2 + j] = miss * precision[j] - shrink * away;
    }
    *value = -0.5 * (fit + shrink * squares) - ((double)groups - 1.0) * x[1];
    gradient[0] = shrink * shift;
    gradient[1] = shrink * squares - ((double)groups - 1.0);
    return 0;
}

PRODUCT(schools_centred_product)
{
    UNUSED(d);
    const double *c = context;
    const size_t groups = (size_t)c[0];
    const double *precision = c + 1 + groups, *theta = x + 2;
    const double shrink = exp(-2.0 * x[1]), along = 2.0 * p[1];
    double moved = 0.0, shift = 0.0, cross = 0.0, squares = 0.0;
    for (size_t j = 0; j < groups; j++) {
        const double away = theta[j] - x[0], change = p[2 + j] - p[0];
        moved += change;
        shift += away;
        cross += away * change;
        squares += away * away;
        product[2 + j] = shrink * (along * away - change) - precision[j] * p[2 + j];
    }
    product[0] = shrink * (moved - along * shift);
    product[1] = shrink * (2.0 * cross - along * squares);
    return 0;
}

/* same context: x = (mu, log tau, z), theta = mu + tau z */
DENSITY(schools_noncentred)
{
    UNUSED(d);
    const double *c = context;
    const size_t groups = (size_t)c[0];
    const double *observed = c + 1, *precision = observed + groups, *z = x + 2, tau = exp(x[1]);
    double total = 0.0, pull_sum = 0.0, cross = 0.0;
    for (size_t j = 0; j < groups; j++) {
        const double miss = observed[j] - x[0] - tau * z[j], pull = miss * precision[j];
        total += miss * pull + z[j] * z[j];
        pull_sum += pull;
        cross += pull * z[j];
        gradient[2 + j] = tau * pull - z[j];
    }
    *value = x[1] - 0.5 * total;
    gradient[0] = pull_sum;
    gradient[1] = 1.0 + tau * cross;
    return 0;
}

PRODUCT(schools_noncentred_product)
{
    UNUSED(d);
    const double *c = context;
    const size_t groups = (size_t)c[0];
    const double *observed = c + 1, *precision = observed + groups, *z = x + 2, tau = exp(x[1]);
    double change_sum = 0.0, cross = 0.0;
    for (size_t j = 0; j < groups; j++) {
        const double pull = (observed[j] - x[0] - tau * z[j]) * precision[j];
        const double change = -(p[0] + tau * (p[1] * z[j] + p[2 + j])) * precision[j];
        change_sum += change;
        cross += p[1] * pull * z[j] + change * z[j] + pull * p[2 + j];
        product[2 + j] = tau * (p[1] * pull + change) - p[2 + j];
    }
    product[0] = change_sum;
    product[1] = tau * cross;
    return 0;
}
