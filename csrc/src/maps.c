/* Lists of maps, and the caller's functions seen through the maps. */
#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "maps.h"

struct fw_maps {
    size_t count, free, natural;
    fw_block *blocks;
    double constant;       /* sum of log(high - low) */
    int bent;              /* is any map not FW_FREE? */
    int outside;           /* of the latest apply */
    /* per free coordinate, for the elementwise kinds */
    double *low, *high;
    double *width, *twice; /* high - low = twice * width; twice = 2 only where the difference overflows */
    double *slope;         /* dx/dy */
    double *turn;          /* derivative of log |dx/dy|, which is also x''/x' */
    /* of the caller's functions: natural vectors x, g, pushed, product; y of x and g */
    fw_target target;
    double *x, *g, *pushed, *product, *at;
    int known; /* do x, g and what apply leaves belong to `at`? */
    uint64_t extra;
    double *memory;
};

/* ---- making ------------------------------------------------------------------------------------------------------ */

static int elementwise(fw_map_kind kind)
{
    return kind <= FW_BETWEEN;
}

static size_t free_of(const fw_map *map)
{
    if (map->kind == FW_SHARES) return map->size - 1;
    if (map->kind == FW_CORRELATION) return map->size * (map->size - 1) / 2;
    return map->size;
}

static int is_finite(double a)
{
    return fabs(a) <= DBL_MAX;
}

/* At most 2^40 values and 2^16 rows: n (n - 1) / 2 and sums of such numbers stay far from overflow. */
static int sound(const fw_map *map)
{
    const size_t least = map->kind == FW_SHARES || map->kind == FW_CORRELATION ? 2 : 1;
    if ((int)map->kind < FW_FREE || map->kind > FW_CORRELATION || map->size < least) return 0;
    if (map->size > ((size_t)1 << (map->kind == FW_CORRELATION ? 16 : 40))) return 0;
    const int low = map->kind == FW_ABOVE || map->kind == FW_BETWEEN;
    const int high = map->kind == FW_BELOW || map->kind == FW_BETWEEN;
    if ((low && !map->low) || (high && !map->high)) return 0;
    for (size_t i = 0; i < map->size && (low || high); ++i)
        if ((low && !is_finite(map->low[i])) || (high && !is_finite(map->high[i])) ||
            (low && high && !(map->low[i] < map->high[i])))
            return 0;
    if (map->kind == FW_INCREASING && map->low && map->high && !(*map->low < *map->high)) return 0;
    return 1;
}

static void lay_out(fw_maps *maps, size_t count, const fw_map *list)
{
    for (size_t k = 0; k < count; ++k) {
        const fw_map *map = &list[k];
        fw_block *last = maps->count ? &maps->blocks[maps->count - 1] : NULL;
        if (map->kind != FW_FREE) maps->bent = 1;
        if (last && elementwise(map->kind) && last->kind == map->kind) {
            last->size += map->size;
            last->free = last->natural = last->size;
        } else {
            fw_block *block = &maps->blocks[maps->count++];
            memset(block, 0, sizeof *block);
            block->kind = map->kind;
            block->size = map->size;
            block->free = free_of(map);
            block->natural = map->kind == FW_SHARES ? map->size : block->free;
            block->free_at = maps->free;
            block->natural_at = maps->natural;
            if (map->kind == FW_INCREASING) {
                block->low = map->low ? *map->low : -INFINITY;
                block->high = map->high ? *map->high : INFINITY;
            }
        }
        maps->free += free_of(map);
        maps->natural += map->kind == FW_SHARES ? map->size : free_of(map);
    }
}

static void set_bounds(fw_maps *maps, size_t count, const fw_map *list)
{
    size_t at = 0;
    for (size_t k = 0; k < count; ++k) {
        const fw_map *map = &list[k];
        for (size_t i = 0; i < map->size && elementwise(map->kind); ++i) {
            maps->slope[at + i] = 1.0;
            maps->turn[at + i] = map->kind == FW_FREE ? 0.0 : 1.0; /* of FW_BETWEEN: set by apply */
            if (map->kind == FW_ABOVE || map->kind == FW_BETWEEN) maps->low[at + i] = map->low[i];
            if (map->kind == FW_BELOW || map->kind == FW_BETWEEN) maps->high[at + i] = map->high[i];
            if (map->kind != FW_BETWEEN) continue;
            double width = map->high[i] - map->low[i], twice = 1.0;
            if (!is_finite(width)) {
                width = 0.5 * map->high[i] - 0.5 * map->low[i];
                twice = 2.0;
            }
            maps->width[at + i] = width;
            maps->twice[at + i] = twice;
            maps->constant += log(width) + log(twice);
        }
        at += free_of(map);
    }
}

static int allocate(fw_maps *maps)
{
    size_t joint = 0;
    for (size_t k = 0; k < maps->count; ++k) joint += fw_joint_scratch(&maps->blocks[k]);
    const size_t n = maps->free, m = maps->natural;
    maps->memory = calloc(7 * n + 4 * m + joint, sizeof(double));
    if (!maps->memory) return FW_NO_MEMORY;
    double *next = maps->memory;
    double **free_arrays[] = {&maps->low, &maps->high, &maps->width, &maps->twice, &maps->slope, &maps->turn, &maps->at};
    for (size_t k = 0; k < 7; ++k, next += n) *free_arrays[k] = next;
    double **natural_arrays[] = {&maps->x, &maps->g, &maps->pushed, &maps->product};
    for (size_t k = 0; k < 4; ++k, next += m) *natural_arrays[k] = next;
    for (size_t k = 0; k < maps->count; ++k) {
        maps->blocks[k].scratch = next;
        next += fw_joint_scratch(&maps->blocks[k]);
    }
    return FW_OK;
}

int fw_maps_new(size_t count, const fw_map *list, fw_maps **out)
{
    *out = NULL;
    if (count == 0) return FW_BAD_ARGUMENT;
    for (size_t k = 0; k < count; ++k)
        if (!sound(&list[k])) return FW_BAD_ARGUMENT;
    fw_maps *maps = calloc(1, sizeof *maps);
    if (!maps) return FW_NO_MEMORY;
    maps->blocks = calloc(count, sizeof *maps->blocks);
    if (maps->blocks) lay_out(maps, count, list);
    if (!maps->blocks || allocate(maps) != FW_OK) {
        fw_maps_free(maps);
        return FW_NO_MEMORY;
    }
    set_bounds(maps, count, list);
    *out = maps;
    return FW_OK;
}

void fw_maps_free(fw_maps *maps)
{
    if (!maps) return;
    free(maps->memory);
    free(maps->blocks);
    free(maps);
}

size_t fw_maps_dimension(const fw_maps *maps)
{
    return maps->free;
}

size_t fw_maps_natural(const fw_maps *maps)
{
    return maps->natural;
}

/* ---- by kind --------------------------------------------------------------------------------------- */

double fw_maps_apply(fw_maps *maps, const double *y, double *x)
{
    double total = maps->constant;
    maps->known = maps->outside = 0;
    for (size_t k = 0; k < maps->count; ++k) {
        const fw_block *b = &maps->blocks[k];
        const size_t at = b->free_at;
        double *to = x + b->natural_at;
        switch (b->kind) {
        case FW_FREE: memcpy(to, y + at, b->size * sizeof *x); break;
        case FW_ABOVE:
            total += fw_one_sided(b->size, 1.0, y + at, maps->low + at, to, maps->slope + at);
            break;
        case FW_BELOW:
            total += fw_one_sided(b->size, -1.0, y + at, maps->high + at, to, maps->slope + at);
            break;
        case FW_BETWEEN:
            total += fw_between(b->size, y + at, maps->low + at, maps->high + at, maps->width + at, maps->twice + at, to,
                                maps->slope + at, maps->turn + at);
            break;
        default:
            total += fw_joint_apply(b, y + at, to);
            if (b->kind == FW_CORRELATION && fw_correlation_singular(b->size, b->scratch)) maps->outside = 1;
        }
    }
    if (!is_finite(total)) maps->outside = 1;
    return total;
}

int fw_maps_outside(const fw_maps *maps)
{
    return maps->outside;
}

void fw_maps_pull(fw_maps *maps, const double *g, int with_jacobian, double *out)
{
    for (size_t k = 0; k < maps->count; ++k) {
        const fw_block *b = &maps->blocks[k];
        const double *from = g + b->natural_at, *slope = maps->slope + b->free_at, *turn = maps->turn + b->free_at;
        double *to = out + b->free_at;
        if (b->kind == FW_FREE) {
            memcpy(to, from, b->size * sizeof *to);
        } else if (!elementwise(b->kind)) {
            fw_joint_pull(b, from, with_jacobian, to);
        } else if (with_jacobian) {
            fw_pull_with_turn(b->size, from, slope, turn, to);
        } else {
            for (size_t i = 0; i < b->size; ++i) to[i] = from[i] * slope[i];
        }
    }
}

void fw_maps_push(fw_maps *maps, const double *p, double *out)
{
    for (size_t k = 0; k < maps->count; ++k) {
        const fw_block *b = &maps->blocks[k];
        const double *from = p + b->free_at, *slope = maps->slope + b->free_at;
        double *to = out + b->natural_at;
        if (elementwise(b->kind)) {
            for (size_t i = 0; i < b->size; ++i) to[i] = from[i] * slope[i];
        } else {
            fw_joint_push(b, from, to);
        }
    }
}

void fw_maps_bend(fw_maps *maps, const double *g, const double *p, double *out)
{
    for (size_t k = 0; k < maps->count; ++k) {
        const fw_block *b = &maps->blocks[k];
        const double *from = g + b->natural_at, *v = p + b->free_at;
        const double *slope = maps->slope + b->free_at, *turn = maps->turn + b->free_at;
        double *to = out + b->free_at;
        if (b->kind == FW_FREE) continue;
        if (!elementwise(b->kind)) {
            fw_joint_bend(b, from, v, to);
        } else if (b->kind == FW_BETWEEN) {
            for (size_t i = 0; i < b->size; ++i)
                to[i] += (from[i] * slope[i] * turn[i] - 0.5 * (1.0 - turn[i]) * (1.0 + turn[i])) * v[i];
        } else {
            for (size_t i = 0; i < b->size; ++i) to[i] += from[i] * slope[i] * v[i];
        }
    }
}

void fw_maps_invert(fw_maps *maps, const double *x, double *y)
{
    for (size_t k = 0; k < maps->count; ++k) {
        const fw_block *b = &maps->blocks[k];
        const double *from = x + b->natural_at, *low = maps->low + b->free_at, *high = maps->high + b->free_at;
        double *to = y + b->free_at;
        if (!elementwise(b->kind)) fw_joint_invert(b, from, to);
        for (size_t i = 0; i < b->size && elementwise(b->kind); ++i) switch (b->kind) {
            case FW_ABOVE: to[i] = from[i] > low[i] ? log(from[i] - low[i]) : NAN; break;
            case FW_BELOW: to[i] = from[i] < high[i] ? log(high[i] - from[i]) : NAN; break;
            case FW_BETWEEN: to[i] = fw_between_inverse(from[i], low[i], high[i], maps->twice[b->free_at + i]); break;
            default: to[i] = from[i];
            }
    }
}

/* ---- the caller's functions through the maps ---------------------------------------------------------------------- */

int fw_maps_target(fw_maps *maps, const fw_target *natural, fw_target *target)
{
    if (natural->dimension != maps->natural || !natural->density) return FW_BAD_ARGUMENT;
    maps->target = *natural;
    maps->known = 0;
    for (size_t i = 0; i < maps->natural; ++i) maps->g[i] = NAN; /* an entry never written is not taken for 0 */
    target->dimension = maps->free;
    target->density = fw_mapped_density;
    target->density_context = maps;
    target->product = natural->product ? fw_mapped_product : NULL;
    target->product_context = maps;
    return FW_OK;
}

static int same_bits(const double *a, const double *b)
{
    return memcmp(a, b, sizeof *a) == 0;
}

/* What *value holds on entry marks "not written": the ends of the natural gradient are marked with it too, and when
 * one of the marks still stands, the caller's own mark in `gradient` is left alone. */
int fw_mapped_density(size_t d, const double *y, double *value, double *gradient, void *context)
{
    fw_maps *maps = context;
    const size_t last = maps->natural - 1;
    const double mark = *value;
    const double log_jacobian = fw_maps_apply(maps, y, maps->x);
    if (maps->outside) return FW_OUTSIDE;
    maps->g[0] = maps->g[last] = mark;
    const int answer = maps->target.density(maps->natural, maps->x, value, maps->g, maps->target.density_context);
    if (answer != 0 || !is_finite(*value)) return answer;
    if (isnan(mark) && (same_bits(&maps->g[0], &mark) || same_bits(&maps->g[last], &mark))) return 0;
    *value += log_jacobian;
    fw_maps_pull(maps, maps->g, 1, gradient);
    if (maps->target.product) {
        memcpy(maps->at, y, d * sizeof *y);
        maps->known = 1;
    }
    return 0;
}

/* J^T H J p + bend: the natural gradient at y is needed, and kept from the latest density. */
int fw_mapped_product(size_t d, const double *y, const double *p, double *product, void *context)
{
    fw_maps *maps = context;
    if (!maps->known || memcmp(maps->at, y, d * sizeof *y) != 0) {
        fw_maps_apply(maps, y, maps->x);
        if (maps->outside) return FW_OUTSIDE;
        if (maps->bent) {
            double value = NAN;
            ++maps->extra;
            const int answer =
                maps->target.density(maps->natural, maps->x, &value, maps->g, maps->target.density_context);
            if (answer != 0) return answer;
            if (!is_finite(value)) return FW_OUTSIDE;
            memcpy(maps->at, y, d * sizeof *y);
            maps->known = 1;
        }
    }
    fw_maps_push(maps, p, maps->pushed);
    maps->product[0] = maps->product[maps->natural - 1] = product[0];
    const int answer =
        maps->target.product(maps->natural, maps->x, maps->pushed, maps->product, maps->target.product_context);
    if (answer != 0) return answer;
    if (isnan(product[0]) &&
        (same_bits(&maps->product[0], &product[0]) || same_bits(&maps->product[maps->natural - 1], &product[0])))
        return 0;
    fw_maps_pull(maps, maps->product, 0, product);
    fw_maps_bend(maps, maps->g, p, product);
    return 0;
}

uint64_t fw_maps_extra(const fw_maps *maps)
{
    return maps->extra;
}
