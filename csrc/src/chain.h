/* Inside of a chain: the walk, the path's working vectors, what settling has gathered, the current point. */
#ifndef FW_CHAIN_H
#define FW_CHAIN_H

#include "walk.h"

#define FW_WINDOW_ROWS 64 /* most draws and gradients of a window kept for learning directions */
#define FW_CLIMB_ROWS 8   /* points that the climb remembers */
#define FW_RING 64       /* gradients remembered for the median that turns bend into beta */

/* Where candidates for the next draw wait. */
typedef struct fw_candidate {
    double *x, *g;
    double value, energy;
} fw_candidate;

/* A finished piece of an orbit: whitened velocity at its first point, its last one (or momentum, see path_nouturn.c),
 * and the sum of its momenta. */
typedef struct fw_piece {
    double *first, *first_p, *last, *rho;
} fw_piece;

/* Everything settling knows besides vectors; exported as it stands. */
typedef struct fw_learn {
    uint64_t least, most, tail; /* the plan: transitions in all, and in its last part */
    uint64_t lead;              /* windows begin after so many */
    uint64_t done;              /* settling transitions completed */
    uint64_t tail_left;         /* > 0: the last part has begun; only the step size moves */
    uint64_t window, in_window, windows, rows;
    uint64_t quiet;             /* windows in a row that moved the base metric little */
    double change;
    /* step size: dual averaging */
    double log_step, log_average, shortfall, mu, count;
    double searched;            /* log of the step size that the last search found */
    uint64_t search;            /* 1: look for a step size before the next path */
    /* bend */
    double bend, ceiling;
    double epoch_log_step, whole_sum, half_sum, whole_squares, half_squares; /* of rejections */
    uint64_t whole_count, half_count;
    double ring[FW_RING];
    uint64_t ring_count;
    uint64_t settled;
    uint64_t base_given;        /* 1: the base metric holds something better than ones */
    uint64_t scale_kept;        /* 1: the caller gave it, so the climb leaves it */
    /* the climb from a far start */
    uint64_t climbing, climbed;
    /* length of jittered paths (length.c) */
    uint64_t steps;             /* most of a path, once settled */
    double reach;               /* most steps times step size */
    uint64_t pilots, pilots_left, pilot_wait, pilot_draws, pilot_gradients, best_gradients;
    double best_reach, factor, gathered;
    double climb_value[FW_CLIMB_ROWS];
} fw_learn;

typedef struct fw_path fw_path;

struct fw_chain {
    fw_walk walk;
    fw_random random;
    fw_settings settings;
    const fw_path *path;
    fw_point end[2];
    double *x, *g, value;     /* the current point */
    uint64_t started, transitions;
    double step_size;         /* used once settled */
    fw_learn learn;
    double *mean_x, *roots_x, *mean_g, *roots_g;
    double *rows_x, *rows_g;  /* points and gradients: of the climb, then of the window (chain->rows of each); NULL when nothing is learned */
    double *found, *known;    /* directions just found, while the old ones are still in use; those as rows */
    fw_candidate fresh, held; /* no-U-turn path */
    fw_piece carry, level[FW_MAX_DOUBLINGS + 1];
    double *orbit_rho, *spare_rho, *seam;
    unsigned char order[FW_RING]; /* slots of learn.ring, as they were last sorted; a hint, not exported */
    size_t ordered;
    size_t rows;
    size_t vectors, bytes;
    double *block;
};

/* One transition's path: from end[0], begun; leaves the chosen point in x, g, value and fills the facts. */
typedef struct fw_route {
    double step_size;
    int finer; /* twice as many steps allowed: settling compares step sizes over equal lengths */
    unsigned doublings; /* no-U-turn path: at most so many in this transition, finer not counted */
    size_t steps;       /* jittered path: at most so many */
} fw_route;

struct fw_path {
    const char *name;
    const char *source;
    int (*travel)(fw_chain *chain, const fw_route *route, fw_facts *facts);
};
extern const fw_path fw_jittered;
extern const fw_path fw_nouturn;
const fw_path *fw_path_named(const char *name);

/* climb.c: one iteration in the place of a transition, while learn.climbing. */
int fw_climb(fw_chain *chain, fw_facts *facts);
void fw_climb_stop(fw_chain *chain);

/* directions.c: from the rows of the window to directions (count x d) and their lambda, scale improved on the way;
 * returns the count. Uses the end points as scratch. */
size_t fw_find_directions(fw_chain *chain, double *scale, double *directions, double *lambda);

/* settle.c */
void fw_learn_first_scale(fw_chain *chain);
void fw_learn_plan(fw_chain *chain, size_t least, size_t most);
int fw_learn_route(fw_chain *chain, fw_route *route);
void fw_learn_update(fw_chain *chain, const fw_route *route, const fw_facts *facts);
void fw_learn_climbed(fw_chain *chain);
void fw_learn_beta(fw_chain *chain);

/* length.c: settling of the length of jittered paths, where settings.steps is 0 */
int fw_length_found_here(const fw_chain *chain);
uint64_t fw_length_budget(const fw_chain *chain, uint64_t most);
size_t fw_length_steps(const fw_chain *chain, double step); /* the most steps of the next path */
int fw_length_piloting(const fw_chain *chain);              /* 1: nothing else may adapt in this transition */
void fw_length_plan(fw_chain *chain);
void fw_length_spread(const fw_chain *chain, double *mean, double *variance); /* before a window is cleared */
/* As the tail begins; NULL: nothing is known. */
void fw_length_begin(fw_chain *chain, const double *mean, const double *variance);
void fw_length_update(fw_chain *chain, const fw_facts *facts);
void fw_length_finish(fw_chain *chain);

/* chain.c */
void fw_chain_take(fw_chain *chain, const double *x, const double *g, double value);

#endif
