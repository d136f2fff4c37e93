/* Steps of a walk: whole, or halved where the energy would swing too far. */
#include <math.h>
#include <string.h>

#include "kernels.h"
#include "walk.h"

const fw_motion *fw_motion_named(const char *name)
{
    static const fw_motion *const motions[] = {&fw_leapfrog, &fw_lagrangian, &fw_isokinetic};
    for (size_t i = 0; name && i < sizeof motions / sizeof *motions; ++i)
        if (strcmp(motions[i]->name, name) == 0) return motions[i];
    return NULL;
}

void fw_point_copy(const fw_walk *walk, const fw_point *from, fw_point *to)
{
    const size_t d = walk->d;
    const fw_point arrays = *to;
    *to = *from;
    to->x = arrays.x;
    to->w = arrays.w;
    to->c = arrays.c;
    to->g = arrays.g;
    to->hc = arrays.hc;
    fw_copy(d, from->x, to->x);
    fw_copy(d, from->w, to->w);
    fw_copy(d, from->c, to->c);
    fw_copy(d, from->g, to->g);
    if (to->hc) fw_copy(d, from->hc, to->hc);
}

int fw_walk_arrive(fw_walk *walk, fw_point *p)
{
    const int status = fw_evaluate(walk, p->x, &p->value, p->g);
    if (status != FW_OK) return status;
    fw_base_arrive(&walk->base, p);
    return isfinite(p->cc) ? FW_OK : FW_GRADIENT_BAD;
}

/* 2^k micro steps from p in place. *range: of the log weight inside the macro step. A failing micro step counts as
 * exceeding every bound, which the caller sees as a positive status. */
static int micro(fw_walk *walk, fw_point *p, double step, unsigned k, double *range)
{
    const size_t count = (size_t)1 << k;
    double low = -p->energy + p->log_jacobian, high = low;
    for (size_t i = 0; i < count; ++i) {
        const int status = walk->motion->step(walk, p, step / (double)count);
        if (status != FW_OK) return status;
        const double level = -p->energy + p->log_jacobian;
        if (level < low) low = level;
        if (level > high) high = level;
        if (high - low > walk->halving_bound) return FW_HALVING;
    }
    *range = high - low;
    return FW_OK;
}

/* Smallest k <= most that keeps the range inside the bound from `from`; *to is the end of that macro step. */
static int smallest(fw_walk *walk, const fw_point *from, double step, unsigned most, fw_point *to, unsigned *k)
{
    int status = FW_HALVING;
    double range;
    for (*k = 0; *k <= most; ++*k) {
        fw_point_copy(walk, from, to);
        status = micro(walk, to, step, *k, &range);
        if (status <= 0) return status;
    }
    return FW_HALVING;
}

/* Within-orbit halving (Bou-Rabee, Carpenter, Kleppe & Liu 2025). The number of halvings is a function of the point
 * alone; the map is reversible only if the far end, looking back, chooses the same number, so that is checked. */
static int halved_step(fw_walk *walk, fw_point *p, double step)
{
    unsigned k, back;
    int status = smallest(walk, p, step, walk->halvings, &walk->spare[0], &k);
    if (status == FW_HALVING) fw_walk_failed(walk, p->x);
    if (status != FW_OK) return status;
    if (k > 0) {
        /* looking back with k halvings retraces the way just taken, so only fewer have to be tried */
        status = smallest(walk, &walk->spare[0], -step, k - 1, &walk->spare[1], &back);
        if (status < 0) return status;
        if (status == FW_OK) {
            fw_walk_failed(walk, walk->spare[0].x);
            return FW_HALVING_BACK;
        }
    }
    walk->halved += ((uint64_t)1 << k) - 1;
    fw_point_copy(walk, &walk->spare[0], p);
    return FW_OK;
}

int fw_walk_whole_step(fw_walk *walk, fw_point *p, double step)
{
    const int status = walk->motion->step(walk, p, step);
    if (status > 0) fw_walk_failed(walk, p->x);
    return status;
}

int fw_walk_step(fw_walk *walk, fw_point *p, double step)
{
    return walk->halvings > 0 ? halved_step(walk, p, step) : fw_walk_whole_step(walk, p, step);
}

int fw_walk_step_in_row(fw_walk *walk, fw_point *p, double step, int first, int last)
{
    if (walk->halvings > 0 || !walk->motion->step_in_row) return fw_walk_step(walk, p, step);
    const int status = walk->motion->step_in_row(walk, p, step, first, last);
    if (status > 0) fw_walk_failed(walk, p->x);
    return status;
}

int fw_walk_begin(fw_walk *walk, fw_point *p, const fw_random *random)
{
    random->normals(random->state, walk->d, p->w);
    fw_base_arrive(&walk->base, p);
    walk->motion->refresh(walk, p);
    p->log_jacobian = 0.0;
    const int status = isfinite(p->cc) ? walk->motion->complete(walk, p) : FW_GRADIENT_BAD;
    if (status > 0) fw_walk_failed(walk, p->x);
    return status;
}
