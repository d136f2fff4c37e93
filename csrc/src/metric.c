/* The metric diagonal plus rank one, G = diag(delta) + sign u u^T.
 *
 * Solve by Sherman & Morrison (1950), determinant by the matrix determinant lemma; draws use the symmetric square
 * root of I + sign w w^T, written so that a vanishing u loses no digits.
 */
#include <math.h>

#include "fellwalk.h"
#include "kernels.h"

static int check(size_t d, const double *delta, const double *u, int sign, double *q, double *level)
{
    if (d == 0 || !delta || !u || (sign != 1 && sign != -1)) return FW_BAD_ARGUMENT;
    if (!fw_all_positive(d, delta)) return FW_NOT_POSITIVE;
    *q = fw_sum_square_ratio(d, u, delta);
    *level = 1.0 + sign * *q;
    return *level > 0.0 && isfinite(*level) ? FW_OK : FW_NOT_POSITIVE;
}

int fw_metric_apply(size_t d, const double *delta, const double *u, int sign, const double *v, double *out)
{
    double q, level;
    const int status = check(d, delta, u, sign, &q, &level);
    if (status != FW_OK) return status;
    fw_apply_out(d, delta, v, sign * fw_dot(d, u, v), u, out);
    return FW_OK;
}

int fw_metric_solve(size_t d, const double *delta, const double *u, int sign, const double *p, double *out)
{
    double q, level;
    const int status = check(d, delta, u, sign, &q, &level);
    if (status != FW_OK) return status;
    fw_solve_out(d, delta, p, sign * fw_ratio_dot(d, u, p, delta) / level, u, out);
    return FW_OK;
}

int fw_metric_log_determinant(size_t d, const double *delta, const double *u, int sign, double *out)
{
    double q, level;
    const int status = check(d, delta, u, sign, &q, &level);
    if (status != FW_OK) return status;
    *out = fw_sum_log(d, delta) + log1p(sign * q);
    return FW_OK;
}

int fw_metric_velocity(size_t d, const double *delta, const double *u, int sign, const double *z, double *out)
{
    double q, level;
    const int status = check(d, delta, u, sign, &q, &level);
    if (status != FW_OK) return status;
    const double root = sqrt(level);
    fw_velocity_out(d, delta, z, sign / (root * (1.0 + root)) * fw_root_ratio_dot(d, u, z, delta), u, out);
    return FW_OK;
}

int fw_metric_momentum(size_t d, const double *delta, const double *u, int sign, const double *z, double *out)
{
    double q, level;
    const int status = check(d, delta, u, sign, &q, &level);
    if (status != FW_OK) return status;
    fw_momentum_out(d, delta, z, sign / (1.0 + sqrt(level)) * fw_root_ratio_dot(d, u, z, delta), u, out);
    return FW_OK;
}
