#include "ridge.h"

int ridge(size_t d, const double *x, double *value, double *gradient, void *context)
{
    const ridge_data *data = context;
    const double w = 1.0 / (data->width * data->width);
    *value = -0.5 * x[0] * x[0];
    gradient[0] = -x[0];
    for (size_t i = 1; i < d; ++i) {
        const double miss = x[i] - data->bend * (x[0] * x[0] - 1.0);
        *value -= 0.5 * w * miss * miss;
        gradient[i] = -w * miss;
        gradient[0] += 2.0 * data->bend * x[0] * w * miss;
    }
    return 0;
}
