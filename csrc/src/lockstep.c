/* Leapfrog steps of many points at once, whose gradients come from one call for all of them. */
#include "fellwalk.h"
#include "kernels.h"

void fw_rows_leave(size_t m, size_t d, const unsigned char *still, double kick, double step, const double *r,
                   const double *g, double *w, double *x)
{
    for (size_t i = 0; i < m; ++i)
        if (!still[i]) fw_kick_drift_gradient(d, kick, g + i * d, step, r, w + i * d, x + i * d);
}

void fw_rows_arrive(size_t m, size_t d, const unsigned char *still, double kick, const double *r, const double *g,
                    double *w, double *ww, double *cc)
{
    for (size_t i = 0; i < m; ++i) {
        if (still[i]) continue;
        double sums[2];
        fw_kick_gradient(d, kick, r, g + i * d, w + i * d, sums);
        ww[i] = sums[0];
        cc[i] = sums[1];
    }
}
