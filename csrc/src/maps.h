/* Inside of the maps of bounded parameters: one block for each map, and the arithmetic of the joint kinds. */
#ifndef FW_MAPS_H
#define FW_MAPS_H

#include "fellwalk.h"

typedef struct fw_block {
    fw_map_kind kind;
    size_t size;            /* as in fw_map */
    size_t free, natural;   /* coordinates and values of this block */
    size_t free_at, natural_at;
    double low, high;       /* FW_INCREASING */
    double *scratch;        /* joint kinds: what apply leaves for the others */
} fw_block;

/* The joint kinds (shares, increasing, correlation): arrays are those of the block alone. maps_joint.c */
size_t fw_joint_scratch(const fw_block *block);
double fw_joint_apply(const fw_block *block, const double *y, double *x);
void fw_joint_pull(const fw_block *block, const double *g, int with_jacobian, double *out);
void fw_joint_push(const fw_block *block, const double *p, double *out);
void fw_joint_bend(const fw_block *block, const double *g, const double *p, double *out);
void fw_joint_invert(const fw_block *block, const double *x, double *y);

/* maps_elementwise.c. slope = dx/dy. x = bound + sign exp(y), sign 1 or -1; returns log |dx/dy|. */
double fw_one_sided(size_t n, double sign, const double *y, const double *bound, double *x, double *slope);
/* high - low = twice * width. turn = derivative of log |dx/dy|, which is returned without the sum of log(high - low). */
double fw_between(size_t n, const double *y, const double *low, const double *high, const double *width,
                  const double *twice, double *x, double *slope, double *turn);
double fw_between_inverse(double x, double low, double high, double twice);
/* out = g*slope + turn */
void fw_pull_with_turn(size_t n, const double *g, const double *slope, const double *turn, double *out);

/* maps_correlation.c */
size_t fw_correlation_scratch(size_t n);
double fw_correlation_apply(size_t n, double *scratch, const double *y, double *x);
int fw_correlation_singular(size_t n, double *scratch); /* after apply: too near to singular for doubles? */
void fw_correlation_pull(size_t n, double *scratch, const double *g, int with_jacobian, double *out);
void fw_correlation_push(size_t n, double *scratch, const double *p, double *out);
void fw_correlation_bend(size_t n, double *scratch, const double *g, const double *p, double *out);
void fw_correlation_invert(size_t n, double *scratch, const double *x, double *y);

#endif
