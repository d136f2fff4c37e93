/* What a window of draws and gradients shows of the directions of a base metric, in few coordinates. */
#ifndef FW_WINDOW_H
#define FW_WINDOW_H

#include "chain.h"

#define FW_WINDOW_WIDE (2 * FW_WINDOW_ROWS + FW_MAX_DIRECTIONS) /* most coordinates: as many as there are rows */

/* m draws y, m gradients c and k directions known before, each of q numbers in an orthonormal basis. */
typedef struct fw_window {
    size_t m, k, q;
    const double *y[FW_WINDOW_ROWS], *c[FW_WINDOW_ROWS], *known[FW_MAX_DIRECTIONS];
} fw_window;

/* Directions of length 1, strongest first. */
typedef struct fw_shown {
    size_t count;
    double rows[FW_MAX_DIRECTIONS][FW_WINDOW_WIDE];
    double log_lambda[FW_MAX_DIRECTIONS];
} fw_shown;

/* fixed: the `most` strongest; else of them those that stand out in the window and in both of its halves. */
void fw_window_show(const fw_window *win, size_t most, int fixed, fw_shown *out);

#endif
