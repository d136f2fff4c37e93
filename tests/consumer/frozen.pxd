# The C API of fellwalk for cimport: `from fellwalk.core cimport fw_chain_new, ...`; compile with fellwalk.get_include().
from libc.stdint cimport int32_t, int64_t, uint64_t


cdef extern from "fellwalk.h" nogil:
    ctypedef int (*fw_density)(size_t d, const double *x, double *value, double *gradient, void *context) noexcept
    ctypedef int (*fw_hessian_product)(size_t d, const double *x, const double *p, double *product,
                                       void *context) noexcept

    ctypedef enum fw_status:
        FW_OK
        FW_OUTSIDE
        FW_VALUE_ZERO
        FW_VALUE_NAN
        FW_GRADIENT_BAD
        FW_PRODUCT_BAD
        FW_POLE
        FW_STIFF
        FW_ENERGY_BAD
        FW_WEIGHT_RANGE
        FW_HALVING
        FW_HALVING_BACK
        FW_CALLBACK_STOP
        FW_NOT_WRITTEN
        FW_VALUE_INFINITE
        FW_INTERRUPTED
        FW_BAD_ARGUMENT
        FW_NO_MEMORY
        FW_BAD_START
        FW_BAD_STATE
        FW_NOT_STARTED
        FW_NOT_POSITIVE
        FW_NO_PRODUCT

    const char *fw_sentence(int status)

    ctypedef struct fw_target:
        size_t dimension
        fw_density density
        void *density_context
        fw_hessian_product product
        void *product_context

    ctypedef struct fw_random:
        void (*normals)(void *state, size_t n, double *out) noexcept
        double (*uniform)(void *state) noexcept
        void (*mark)(void *state) noexcept
        void *state

    int fw_metric_apply(size_t d, const double *delta, const double *u, int sign, const double *v, double *out)
    int fw_metric_solve(size_t d, const double *delta, const double *u, int sign, const double *p, double *out)
    int fw_metric_log_determinant(size_t d, const double *delta, const double *u, int sign, double *out)
    int fw_metric_velocity(size_t d, const double *delta, const double *u, int sign, const double *z, double *out)
    int fw_metric_momentum(size_t d, const double *delta, const double *u, int sign, const double *z, double *out)

    ctypedef enum fw_scheme:
        FW_SPLIT
        FW_SEMI_EXPLICIT

    ctypedef enum fw_curvature:
        FW_SURROGATE
        FW_DIFFERENCE
        FW_PRODUCT

    ctypedef enum fw_turn:
        FW_TURN_BASE
        FW_TURN_METRIC

    enum:
        FW_MAX_DIRECTIONS
        FW_MAX_DOUBLINGS
        FW_MAX_HALVINGS

    ctypedef struct fw_settings:
        const char *motion
        const char *path
        fw_scheme scheme
        fw_curvature curvature
        double bend
        double beta
        size_t steps
        unsigned int doublings
        fw_turn turn
        unsigned int halvings
        double halving_bound
        double step_size
        double acceptance
        size_t settle_least
        size_t settle_most
        unsigned int rank
        int rank_fixed
        int adapt_step
        int adapt_scale

    ctypedef struct fw_chain:
        pass

    ctypedef struct fw_facts:
        double log_density
        double energy
        double log_weight_range
        double acceptance
        double step_size
        int32_t steps
        int32_t gradients
        int32_t products
        int32_t failure

    ctypedef struct fw_output:
        double *draws
        double *gradients
        fw_facts *facts
        size_t failures_room
        size_t failures
        int64_t *failure_index
        int32_t *failure_code
        double *failure_position
        const size_t *watched
        size_t watched_count
        double *mean
        double *squares
        uint64_t gathered

    int fw_chain_new(const fw_target *target, const fw_random *random, const fw_settings *settings, fw_chain **chain)
    void fw_chain_free(fw_chain *chain)
    void fw_chain_watch(fw_chain *chain, const volatile int *flag)
    int fw_chain_set_base(fw_chain *chain, const double *scale, size_t count, const double *directions,
                          const double *lambda_)
    size_t fw_chain_base(const fw_chain *chain, double *scale, double *directions, double *lambda_)
    int fw_chain_start(fw_chain *chain, const double *x)
    int fw_chain_density_changed(fw_chain *chain, const double *x)
    int fw_chain_settle(fw_chain *chain, size_t least, size_t most)
    int fw_chain_settled(const fw_chain *chain)
    int fw_chain_run(fw_chain *chain, size_t n, fw_output *output, size_t *done)

    ctypedef struct fw_path_out:
        double *trace_x
        double *trace_v
        double *trace_facts
        double log_density
        double log_jacobian
        double log_ratio
        size_t steps_done
        uint64_t gradients
        uint64_t products

    int fw_chain_integrate(fw_chain *chain, double *x, double *v, double step_size, size_t steps, fw_path_out *out)
    void fw_chain_point(const fw_chain *chain, double *x, double *gradient, double *log_density)
    void fw_chain_failed_at(const fw_chain *chain, double *x)

    ctypedef struct fw_summary:
        uint64_t gradients
        uint64_t products
        uint64_t transitions
        uint64_t settled_transitions
        uint64_t windows
        double step_size
        double beta
        double bend
        double ceiling
        double change
        size_t directions
        size_t workspace_vectors
        size_t workspace_bytes
        int started
        int settled
        size_t steps

    void fw_chain_summary(const fw_chain *chain, fw_summary *summary)
    size_t fw_chain_state_bytes(const fw_chain *chain)
    int fw_chain_export(const fw_chain *chain, void *bytes, size_t size)
    int fw_chain_import(fw_chain *chain, const void *bytes, size_t size)

    void fw_rows_leave(size_t m, size_t d, const unsigned char *still, double kick, double step, const double *r,
                       const double *g, double *w, double *x)
    void fw_rows_arrive(size_t m, size_t d, const unsigned char *still, double kick, const double *r, const double *g,
                        double *w, double *ww, double *cc)

    ctypedef enum fw_map_kind:
        FW_FREE
        FW_ABOVE
        FW_BELOW
        FW_BETWEEN
        FW_SHARES
        FW_INCREASING
        FW_CORRELATION

    ctypedef struct fw_map:
        fw_map_kind kind
        size_t size
        const double *low
        const double *high

    ctypedef struct fw_maps:
        pass

    int fw_maps_new(size_t count, const fw_map *list_, fw_maps **maps)
    void fw_maps_free(fw_maps *maps)
    size_t fw_maps_dimension(const fw_maps *maps)
    size_t fw_maps_natural(const fw_maps *maps)
    double fw_maps_apply(fw_maps *maps, const double *y, double *x)
    int fw_maps_outside(const fw_maps *maps)
    void fw_maps_pull(fw_maps *maps, const double *g, int with_jacobian, double *out)
    void fw_maps_push(fw_maps *maps, const double *p, double *out)
    void fw_maps_bend(fw_maps *maps, const double *g, const double *p, double *out)
    void fw_maps_invert(fw_maps *maps, const double *x, double *y)
    int fw_maps_target(fw_maps *maps, const fw_target *natural, fw_target *target)
    int fw_mapped_density(size_t d, const double *y, double *value, double *gradient, void *maps) noexcept
    int fw_mapped_product(size_t d, const double *y, const double *p, double *product, void *maps) noexcept
    uint64_t fw_maps_extra(const fw_maps *maps)
