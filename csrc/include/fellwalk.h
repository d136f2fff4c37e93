/* fellwalk: points that move along explicit geometric flows, on a density the caller brings.
 *
 * The caller supplies a log density with its gradient (and, if there is one, a product of its Hessian with a vector)
 * and a source of random numbers. The library moves chains of points so that, after settling, each chain leaves
 * exp(log density) invariant. It allocates once per chain, prints nothing, keeps no global state, and depends on
 * libc and libm only.
 *
 * Structs that the caller fills may get members at their ends, whose zero means what was before: begin with zeros.
 *
 * Ownership: the caller owns every array it passes and everything behind a context pointer; fw_chain_new makes a
 * chain, fw_chain_free (NULL is fine) ends it. A chain must be used by one thread at a time; different chains are
 * independent.
 *
 * Read top-down: statuses, callbacks, metric operations, settings, the chain.
 */
#ifndef FELLWALK_H
#define FELLWALK_H

#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#if defined(_WIN32)
#define FW_API
#elif defined(__GNUC__)
#define FW_API __attribute__((visibility("default")))
#else
#define FW_API
#endif

/* ---- statuses ---------------------------------------------------------------------------------------------------
 * 0 is fine. Positive codes end one path: the transition completes and the code is counted. Negative codes stop the
 * call and leave the chain as it was before the transition. */
#define FW_STATUS_LIST(X)                                                                                              \
    X(FW_OK, 0, "fine")                                                                                                \
    X(FW_OUTSIDE, 1, "the density function reported a point outside its support")                                      \
    X(FW_VALUE_ZERO, 2, "the log density was minus infinity")                                                          \
    X(FW_VALUE_NAN, 3, "the log density was computed as NaN")                                                          \
    X(FW_GRADIENT_BAD, 4, "the gradient was not finite where the log density was")                                     \
    X(FW_PRODUCT_BAD, 5, "the Hessian product was not finite or not available at this point")                          \
    X(FW_POLE, 6, "the step met a pole of the geometric flow (step too long for this bend)")                           \
    X(FW_STIFF, 7, "the geometric flow was too stiff to be reversed in double precision")                              \
    X(FW_ENERGY_BAD, 8, "the energy was not finite")                                                                   \
    X(FW_WEIGHT_RANGE, 9, "the log weights along the path spanned more than 1000")                                     \
    X(FW_HALVING, 10, "no allowed halving of the step kept the energy within its bound")                               \
    X(FW_HALVING_BACK, 11, "seen from its far end the step would have been halved differently")                        \
    X(FW_CALLBACK_STOP, -1, "the caller's function asked to stop")                                                     \
    X(FW_NOT_WRITTEN, -2, "the density function returned 0 without writing a log density and gradient")                \
    X(FW_VALUE_INFINITE, -3, "the log density was plus infinity")                                                      \
    X(FW_INTERRUPTED, -4, "the call was interrupted")                                                                  \
    X(FW_BAD_ARGUMENT, -5, "an argument is out of range")                                                              \
    X(FW_NO_MEMORY, -6, "the workspace could not be allocated")                                                        \
    X(FW_BAD_START, -7, "the log density or its gradient is not finite at the starting point")                         \
    X(FW_BAD_STATE, -8, "the stored chain state is damaged or belongs to a chain of other settings")                   \
    X(FW_NOT_STARTED, -9, "the chain has no starting point yet")                                                       \
    X(FW_NOT_POSITIVE, -10, "the metric is not positive definite")                                                     \
    X(FW_NO_PRODUCT, -11, "this motion needs Hessian products and none were given")

typedef enum fw_status {
#define FW_STATUS_ENUM(name, code, sentence) name = code,
    FW_STATUS_LIST(FW_STATUS_ENUM)
#undef FW_STATUS_ENUM
} fw_status;

/* The sentence that belongs to a status; never NULL. */
FW_API const char *fw_sentence(int status);

/* ---- what the caller brings ------------------------------------------------------------------------------------- */

/* Log density and gradient at x (d numbers each). Return 0 when both were written, > 0 when x is outside the support
 * (the path ends there), < 0 to stop now. */
typedef int (*fw_density)(size_t d, const double *x, double *value, double *gradient, void *context);

/* product = Hessian of the log density at x times p; same return values. */
typedef int (*fw_hessian_product)(size_t d, const double *x, const double *p, double *product, void *context);

typedef struct fw_target {
    size_t dimension;
    fw_density density;
    void *density_context;
    fw_hessian_product product; /* may be NULL */
    void *product_context;
} fw_target;

/* Random numbers. normals fills n standard normal numbers; uniform gives one number in [0, 1). mark, which may be
 * NULL, is called as each transition begins: after a status < 0 the owner of the stream takes it back to the mark. */
typedef struct fw_random {
    void (*normals)(void *state, size_t n, double *out);
    double (*uniform)(void *state);
    void (*mark)(void *state);
    void *state;
} fw_random;

/* ---- metric: diagonal plus rank one -----------------------------------------------------------------------------
 * G = diag(delta) + sign * u u^T, delta > 0, sign +1 or -1, positive definite: L = 1 + sign * sum u^2/delta > 0.
 * All O(d). out may be the same array as the vector argument. FW_NOT_POSITIVE when G is not positive definite. */
FW_API int fw_metric_apply(size_t d, const double *delta, const double *u, int sign, const double *v, double *out);
FW_API int fw_metric_solve(size_t d, const double *delta, const double *u, int sign, const double *p, double *out);
FW_API int fw_metric_log_determinant(size_t d, const double *delta, const double *u, int sign, double *out);
/* From z ~ N(0, I): velocity ~ N(0, G^-1), momentum ~ N(0, G). */
FW_API int fw_metric_velocity(size_t d, const double *delta, const double *u, int sign, const double *z, double *out);
FW_API int fw_metric_momentum(size_t d, const double *delta, const double *u, int sign, const double *z, double *out);

/* ---- settings of a chain ---------------------------------------------------------------------------------------- */

typedef enum fw_scheme { FW_SPLIT = 0, FW_SEMI_EXPLICIT = 1 } fw_scheme;
typedef enum fw_curvature { FW_SURROGATE = 0, FW_DIFFERENCE = 1, FW_PRODUCT = 2 } fw_curvature;
typedef enum fw_turn { FW_TURN_BASE = 0, FW_TURN_METRIC = 1 } fw_turn;

#define FW_MAX_DIRECTIONS 16
#define FW_MAX_DOUBLINGS 20
#define FW_MAX_HALVINGS 12

typedef struct fw_settings {
    const char *motion;     /* "leapfrog", "lagrangian" or "isokinetic" (dimension >= 2) */
    const char *path;       /* "jittered" or "no-u-turn" */
    fw_scheme scheme;       /* Lagrangian motion: which integrator */
    fw_curvature curvature; /* Lagrangian motion: which symmetric field stands for the Hessian */
    double bend;            /* Lagrangian motion: typical L - 1; >= 0 */
    double beta;            /* >= 0: use this beta and do not derive it from bend; < 0: from bend */
    size_t steps;           /* jittered path: steps uniform on 1..steps; 0: settling finds how many (16 without settling) */
    unsigned doublings;     /* no-U-turn path: at most 2^doublings steps */
    fw_turn turn;           /* no-U-turn path: momentum of the base metric or of the full metric */
    unsigned halvings;      /* a step may be done as up to 2^halvings smaller ones; 0: never */
    double halving_bound;   /* largest range of energy minus log-Jacobian inside one step; > 0 */
    double step_size;       /* > 0: start settling from it (and keep it when adapt_step is 0); 0: find one */
    double acceptance;      /* target of settling, inside (0, 1) */
    size_t settle_least;    /* settling takes at least and at most so many transitions: */
    size_t settle_most;     /* equal numbers fix it */
    unsigned rank;          /* at most so many learned directions in the base metric */
    int rank_fixed;         /* 1: take `rank` directions whether or not they stand out; 0: only those that do */
    int adapt_step;         /* 0: keep step_size */
    int adapt_scale;        /* 0: keep the scale and directions given */
} fw_settings;

/* ---- the chain --------------------------------------------------------------------------------------------------- */

typedef struct fw_chain fw_chain;

/* What is known about one transition. */
typedef struct fw_facts {
    double log_density;      /* at the draw */
    double energy;           /* of the draw and the velocity it was reached with */
    double log_weight_range; /* largest minus smallest log weight along the path */
    double acceptance;       /* mean of min(1, weight / weight of the start) over the new states */
    double step_size;
    int32_t steps;
    int32_t gradients;
    int32_t products;
    int32_t failure; /* 0, or the status that ended the path */
} fw_facts;

/* Where fw_chain_run writes; every pointer may be NULL. Arrays hold one row per transition. */
typedef struct fw_output {
    double *draws;     /* n x d */
    double *gradients; /* n x d */
    fw_facts *facts;   /* n */
    size_t failures_room;
    size_t failures;          /* in and out: rows used of the three arrays below */
    int64_t *failure_index;   /* transition number in this call */
    int32_t *failure_code;    /* status */
    double *failure_position; /* failures_room x d */
    const size_t *watched; /* NULL: all of a draw; else rows of draws and failure_position are these coordinates */
    size_t watched_count;
    double *mean, *squares; /* d each, in and out: running mean of the draws, and sum of squared deviations from it */
    uint64_t gathered;      /* in and out: draws in them */
} fw_output;

/* Sets *chain. target and random are copied; strings in settings are not kept. */
FW_API int fw_chain_new(const fw_target *target, const fw_random *random, const fw_settings *settings, fw_chain **chain);
FW_API void fw_chain_free(fw_chain *chain);

/* The chain looks at *flag between steps and stops with FW_INTERRUPTED when it is not 0. NULL: never. */
FW_API void fw_chain_watch(fw_chain *chain, const volatile int *flag);

/* Base metric: G0^-1 = s^1/2 (I + E (lambda - 1) E^T) s^1/2 with `count` orthonormal columns E, stored one after the
 * other (count x d), and lambda > 0. scale has d numbers > 0. Only before settling or in a chain that does not settle. */
FW_API int fw_chain_set_base(fw_chain *chain, const double *scale, size_t count, const double *directions,
                             const double *lambda);
FW_API size_t fw_chain_base(const fw_chain *chain, double *scale, double *directions, double *lambda);

/* Evaluate at x and make it the current point. On failure the chain keeps what it had. */
FW_API int fw_chain_start(fw_chain *chain, const double *x);

/* The density is another one from now on: evaluate it anew, at x or (x NULL) at the current point. A chain that is
 * settling begins its plan anew, from the base metric it has; a settled one keeps what it has found. On failure the
 * chain keeps what it had. */
FW_API int fw_chain_density_changed(fw_chain *chain, const double *x);

/* A new plan of settling that begins now, from whatever the chain has learned so far. */
FW_API int fw_chain_settle(fw_chain *chain, size_t least, size_t most);
FW_API int fw_chain_settled(const fw_chain *chain);

/* Up to n transitions. A settling chain returns at the end of settling; *done counts the transitions completed.
 * A status < 0 undoes the transition in hand; those completed stand. */
FW_API int fw_chain_run(fw_chain *chain, size_t n, fw_output *output, size_t *done);

typedef struct fw_path_out {
    double *trace_x;     /* (steps + 1) x d or NULL */
    double *trace_v;     /* (steps + 1) x d or NULL */
    double *trace_facts; /* (steps + 1) x 3: log density, energy, log-Jacobian; or NULL */
    double log_density, log_jacobian, log_ratio;
    size_t steps_done;
    uint64_t gradients, products;
} fw_path_out;

/* One path of `steps` steps from (x, v), which are replaced by its end. The chain's point is not touched. */
FW_API int fw_chain_integrate(fw_chain *chain, double *x, double *v, double step_size, size_t steps, fw_path_out *out);

/* Read access; NULL pointers are skipped. */
FW_API void fw_chain_point(const fw_chain *chain, double *x, double *gradient, double *log_density);
/* Where the caller's function was called when it ended the latest call with a status from -1 to -3. */
FW_API void fw_chain_failed_at(const fw_chain *chain, double *x);

typedef struct fw_summary {
    uint64_t gradients, products; /* calls so far, all phases */
    uint64_t transitions;         /* completed, all phases */
    uint64_t settled_transitions; /* completed while settling, in the current plan */
    uint64_t windows;             /* windows finished in the current plan */
    double step_size, beta, bend, ceiling;
    double change; /* |log ratio| of standard deviations by which the last window moved the base metric */
    size_t directions;
    size_t workspace_vectors; /* vectors of d numbers in the workspace */
    size_t workspace_bytes;
    int started, settled;
    size_t steps; /* jittered path: the most of the next path; else 0 */
} fw_summary;
FW_API void fw_chain_summary(const fw_chain *chain, fw_summary *summary);

/* The whole state (position, gradient, base metric, everything settling has gathered) as bytes; random numbers are
 * the caller's. Import wants a chain made with the same settings and dimension. */
FW_API size_t fw_chain_state_bytes(const fw_chain *chain);
FW_API int fw_chain_export(const fw_chain *chain, void *bytes, size_t size);
FW_API int fw_chain_import(fw_chain *chain, const void *bytes, size_t size);

/* ---- many points at once -----------------------------------------------------------------------------------------
 * The two halves of a leapfrog step over the base metric G0^-1 = diag(r)^2, for m points of which some stand still
 * (their rows are not touched). x, w, g are m x d; w are velocities divided by r, as chains keep them. Between leave and
 * arrive the caller finds the gradients g at x. */

/* w += kick r*g; x += step r*w */
FW_API void fw_rows_leave(size_t m, size_t d, const unsigned char *still, double kick, double step, const double *r,
                          const double *g, double *w, double *x);
/* w += kick r*g; ww and cc, m numbers each: |w|^2 after that, |r*g|^2. */
FW_API void fw_rows_arrive(size_t m, size_t d, const unsigned char *still, double kick, const double *r, const double *g,
                           double *w, double *ww, double *cc);

/* ---- bounded parameters ------------------------------------------------------------------------------------------
 * Chains move in free coordinates, all of R^d; the caller's functions see natural values, inside their bounds. A list
 * of maps, one after the other, takes the free coordinates y to the natural values x:
 *
 *   kind            free    natural  map                                                   log |dx/dy|
 *   FW_FREE         n       n        x = y                                                 0
 *   FW_ABOVE        n       n        x = low + exp(y)                                      sum y
 *   FW_BELOW        n       n        x = high - exp(y)                                     sum y
 *   FW_BETWEEN      n       n        x = low + (high - low) / (1 + exp(-y))                sum log(high - low) - |y|
 *                                                                                            - 2 log(1 + exp(-|y|))
 *   FW_SHARES       n - 1   n        x = softmax(V y), V an orthonormal basis of the       sum log x + log(n) / 2
 *                                    vectors of sum 0 (Egozcue et al. 2003)                (of the first n - 1 shares)
 *   FW_INCREASING   n       n        x[k] = x[k-1] + exp(y[k]), x[0] = y[0], or            sum of those y that are
 *                                    low + exp(y[0]); only high: the same from above;      exponents; as FW_SHARES
 *                                    both: the gaps are n + 1 shares of high - low         plus n log(high - low)
 *   FW_CORRELATION  n(n-1)/2 same    the entries below the diagonal, row by row, of        sum over i > k >= 0 of
 *                                    R = L L^T; tanh(y) are the canonical partial          (n - k) log sech(y[i,k])
 *                                    correlations (Lewandowski, Kurowicka & Joe 2009)
 *
 * Natural values never leave their bounds: where rounding would put one on a bound it is the nearest number inside
 * (when no number lies between two bounds: one of the bounds). A fw_maps has its own scratch, allocated once, and
 * serves one thread at a time. */
typedef enum fw_map_kind {
    FW_FREE = 0,
    FW_ABOVE = 1,
    FW_BELOW = 2,
    FW_BETWEEN = 3,
    FW_SHARES = 4,
    FW_INCREASING = 5,
    FW_CORRELATION = 6
} fw_map_kind;

typedef struct fw_map {
    fw_map_kind kind;
    size_t size;        /* elementwise kinds, increasing: values; shares: shares, >= 2; correlation: rows, >= 2 */
    const double *low;  /* FW_ABOVE, FW_BETWEEN: `size` numbers; FW_INCREASING: one, -infinity for none; else unused */
    const double *high; /* FW_BELOW, FW_BETWEEN: `size` numbers; FW_INCREASING: one, infinity for none; else unused */
} fw_map;

typedef struct fw_maps fw_maps;

/* Sets *maps; the arrays of bounds are copied. FW_BAD_ARGUMENT: a size, a bound, or low >= high. */
FW_API int fw_maps_new(size_t count, const fw_map *list, fw_maps **maps);
FW_API void fw_maps_free(fw_maps *maps);
FW_API size_t fw_maps_dimension(const fw_maps *maps); /* free coordinates */
FW_API size_t fw_maps_natural(const fw_maps *maps);   /* natural values */

/* x = natural values of y; returns log |dx/dy|. What follows is about the y of the latest apply. */
FW_API double fw_maps_apply(fw_maps *maps, const double *y, double *x);
/* 1 where the caller's functions are not called: a log |dx/dy| that is not finite, or a correlation matrix so near
 * to singular (1 / |L^-1|^2 below 64 n epsilon) that its entries, rounded, may not be positive definite any more. */
FW_API int fw_maps_outside(const fw_maps *maps);
/* out = J^T g, J = dx/dy; with_jacobian: plus the gradient of log |dx/dy|. */
FW_API void fw_maps_pull(fw_maps *maps, const double *g, int with_jacobian, double *out);
/* out = J p */
FW_API void fw_maps_push(fw_maps *maps, const double *p, double *out);
/* out += (sum_k g_k Hessian of x_k + Hessian of log |dx/dy|) p; exact, for correlations by central differences of pull. */
FW_API void fw_maps_bend(fw_maps *maps, const double *g, const double *p, double *out);
/* y of x; an entry is not finite where x is not inside its bounds. Independent of apply. */
FW_API void fw_maps_invert(fw_maps *maps, const double *x, double *y);

/* The caller's functions of natural values (natural->dimension of them; FW_OUTSIDE where fw_maps_outside), seen from free coordinates: the log density
 * plus log |dx/dy|, its gradient, its Hessian product. fw_maps_target gives a target for fw_chain_new whose contexts
 * are the maps. A product at another position than the latest density costs one more call of the density, unless all
 * is FW_FREE; fw_maps_extra counts these. */
FW_API int fw_maps_target(fw_maps *maps, const fw_target *natural, fw_target *target);
FW_API int fw_mapped_density(size_t d, const double *y, double *value, double *gradient, void *maps);
FW_API int fw_mapped_product(size_t d, const double *y, const double *p, double *product, void *maps);
FW_API uint64_t fw_maps_extra(const fw_maps *maps);

#ifdef __cplusplus
}
#endif
#endif
