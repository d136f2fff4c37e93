/* A walk: one phase-space point moved by one motion over one base metric. Everything the motions and paths share.
 *
 * Coordinates. Positions x and gradients g are the caller's. Velocities are kept whitened by the base metric,
 * v = S w with G0^-1 = S S^T, S = diag(r) A, A = I + E (lambda^1/2 - 1) E^T (symmetric), and gradients too: c = S^T g.
 * In these coordinates the base metric is the identity, the Monge metric is I + beta c c^T, and the surrogate
 * curvature is -I: every scale of the problem sits in r and E, none in the formulas of a motion.
 */
#ifndef FW_WALK_H
#define FW_WALK_H

#include "fellwalk.h"

typedef struct fw_base {
    size_t d, k;
    double *r;          /* sqrt(s) */
    double *directions; /* k columns of d, one after the other */
    double lambda[FW_MAX_DIRECTIONS];
    double log_det; /* log det G0^-1 */
} fw_base;

/* x, w, c, g are d-vectors; hc = H~ c is NULL unless the motion uses a curvature of its own. Motions keep c and the sums
 * up to date as far as they need them. */
typedef struct fw_point {
    double *x, *w, *c, *g, *hc;
    double value;                /* log density at x */
    double ww, wc, cc;           /* w.w, w.c, c.c */
    double whw, whc, chc, hchc;  /* w.H~w, w.hc, c.hc, hc.hc */
    double coarsest;             /* largest |x|/r, for gradient differences */
    double owed;                 /* between steps of a row: what w still lacks, in units of c */
    double energy;
    double log_jacobian;   /* of the map from the start of the path */
} fw_point;

struct fw_walk;

typedef struct fw_motion {
    const char *name;
    const char *source; /* where the method was published */
    size_t least_dimension;
    int uses_products;  /* 1: points carry hc when the curvature is not the surrogate */
    /* Turn standard normal numbers in p->w into a velocity drawn given p->x; c and the sums are set and kept so. */
    void (*refresh)(const struct fw_walk *walk, fw_point *p);
    /* Complete a point whose x, w, c, value and the sums ww, wc, cc are set: curvature, energy. */
    int (*complete)(struct fw_walk *walk, fw_point *p);
    /* Move p by the signed step; adds to p->log_jacobian, sets p->energy. > 0: the step failed, p is scrap. */
    int (*step)(struct fw_walk *walk, fw_point *p, double step);
    /* NULL, or the same for equal steps that follow each other when only x, value, energy and log_jacobian are asked for
     * in between: the end of a step and the beginning of the next share a pass. first, last: of the row. All are those
     * of single steps, bit for bit; until the last step has ended the rest of p is the motion's own. */
    int (*step_in_row)(struct fw_walk *walk, fw_point *p, double step, int first, int last);
    /* Whitened momentum (of the full metric) = w + k c: its coefficient k at p. */
    double (*momentum)(const struct fw_walk *walk, const fw_point *p);
} fw_motion;

extern const fw_motion fw_leapfrog;
extern const fw_motion fw_lagrangian;
extern const fw_motion fw_isokinetic;
const fw_motion *fw_motion_named(const char *name);

typedef struct fw_walk {
    fw_target target;
    size_t d;
    const fw_motion *motion;
    fw_base base;
    fw_scheme scheme;
    fw_curvature curvature;
    double beta;
    unsigned halvings;
    double halving_bound;
    const volatile int *watch;
    uint64_t gradients, products;
    uint64_t halved;          /* micro steps beyond the first of each macro step */
    double *failed_at;        /* position of the last failed evaluation or step */
    double *natural, *product, *probe; /* scratch of curvature products; NULL when the curvature is the surrogate */
    fw_point spare[2];        /* scratch of halving; NULL arrays without it */
} fw_walk;

/* density.c: one checked evaluation; value and g are set on FW_OK only. */
int fw_evaluate(fw_walk *walk, const double *x, double *value, double *g);
/* walk->product = gradient at walk->probe, or Hessian at x times walk->natural. */
int fw_evaluate_probe(fw_walk *walk);
int fw_multiply(fw_walk *walk, const double *x);

/* Are Hessian products differences of gradients? */
static inline int fw_differs(const fw_walk *walk) { return walk->curvature == FW_DIFFERENCE; }

/* curvature.c: from x, g and, for differences, coarsest of the point: c, cc, hc, chc, hchc. */
int fw_curve_gradient(fw_walk *walk, fw_point *p);
/* w.H~w at the point, ww set. spread: walk->natural is S w already. */
int fw_curve_velocity(fw_walk *walk, const fw_point *p, int spread, double *whw);
/* w.H~w, c.H~w, hc.H~w, hc.w */
int fw_curve_velocity_all(fw_walk *walk, const fw_point *p, double sums[4]);

/* base.c */
void fw_base_set(fw_base *base, const double *scale, size_t k, const double *directions, const double *lambda);
void fw_base_spread(const fw_base *base, double *w);                       /* w <- A w */
void fw_base_unspread(const fw_base *base, double *w);                     /* w <- A^-1 w */
void fw_base_velocity(const fw_base *base, const double *w, double *v);    /* v = S w */
void fw_base_whiten_velocity(const fw_base *base, const double *v, double *w);
void fw_base_gradient(const fw_base *base, const double *g, double *c);    /* c = S^T g */
/* w += kick c; x += step S w */
void fw_base_kick_drift(const fw_base *base, double kick, double step, fw_point *p);
/* w += kc c + kh hc, ww; x += step S w; spacing: coarsest of the new x, too */
void fw_base_kick2_drift(const fw_base *base, double kc, double kh, double step, int spacing, fw_point *p);
/* With c = S^T g: w += kick c; ww, cc; once more w += kick c; x + step S w in the place of g */
void fw_base_link(const fw_base *base, double kick, double step, fw_point *p);
/* c = S^T g; sums of p */
void fw_base_arrive(const fw_base *base, fw_point *p);

/* walk.c */
void fw_point_copy(const fw_walk *walk, const fw_point *from, fw_point *to);
/* From p->x, p->value, p->g: a fresh velocity and everything that belongs to the start of a path. */
int fw_walk_begin(fw_walk *walk, fw_point *p, const fw_random *random);
/* A signed step, halved as the settings ask; the paths call only this, and the next. */
int fw_walk_step(fw_walk *walk, fw_point *p, double step);
/* A step of a row of equal ones: p is whole after the last; before, x, value, energy and log_jacobian are told. */
int fw_walk_step_in_row(fw_walk *walk, fw_point *p, double step, int first, int last);
/* A step without halving. */
int fw_walk_whole_step(fw_walk *walk, fw_point *p, double step);
void fw_walk_failed(fw_walk *walk, const double *x);
/* Evaluate p->x and make c and the sums. */
int fw_walk_arrive(fw_walk *walk, fw_point *p);

#endif
