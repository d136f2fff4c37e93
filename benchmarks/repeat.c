/* Calls a log density or a Hessian product n times, so that its own time can be measured without Python in between. */
#include <stddef.h>

int repeat_density(int (*f)(size_t, const double *, double *, double *, void *), long n, size_t d, const double *x,
                   double *value, double *gradient, void *context)
{
    int status = 0;
    for (long i = 0; i < n && !status; i++)
        status = f(d, x, value, gradient, context);
    return status;
}

int repeat_product(int (*f)(size_t, const double *, const double *, double *, void *), long n, size_t d,
                   const double *x, const double *p, double *product, void *context)
{
    int status = 0;
    for (long i = 0; i < n && !status; i++)
        status = f(d, x, p, product, context);
    return status;
}
