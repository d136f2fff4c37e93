/* A chain that settles and then keeps: its exported bytes at the end of settling and after keeping. */
#include <stdlib.h>
#include <string.h>

#include "harness.h"

/* Words of the state that may differ are those of the point, of the counters, and the checksum at the end. */
static int may_change(const fw_chain *chain, size_t d, uint64_t word)
{
    fw_summary now;
    fw_chain_summary(chain, &now);
    if (word == now.gradients || word == now.products || word == now.transitions) return 1;
    double *point = calloc(2 * d + 1, sizeof *point);
    if (!point) return 0;
    fw_chain_point(chain, point, point + d, point + 2 * d);
    int found = 0;
    for (size_t i = 0; i < 2 * d + 1; ++i) found |= memcmp(&word, point + i, sizeof word) == 0;
    free(point);
    return found;
}

static int grown_only(const fw_summary *a, const fw_summary *b)
{
    return memcmp(&a->step_size, &b->step_size, sizeof(double)) == 0 && memcmp(&a->beta, &b->beta, sizeof(double)) == 0 &&
           memcmp(&a->bend, &b->bend, sizeof(double)) == 0 && a->directions == b->directions &&
           a->windows == b->windows && a->settled_transitions == b->settled_transitions && b->settled &&
           b->transitions > a->transitions && b->gradients > a->gradients;
}

static int same_base(fw_chain *chain, size_t d, double *before, int compare)
{
    const size_t room = d + FW_MAX_DIRECTIONS * (d + 1);
    double *now = calloc(room, sizeof *now);
    if (!now) return 0;
    fw_chain_base(chain, now, now + d, now + d + FW_MAX_DIRECTIONS * d);
    const int same = !compare || memcmp(now, before, room * sizeof *now) == 0;
    if (!compare) memcpy(before, now, room * sizeof *now);
    free(now);
    return same;
}

static void words_changed(const fw_chain *chain, size_t d, const uint64_t *a, const uint64_t *b, size_t words, int32_t *out)
{
    for (size_t i = 0; i + 1 < words; ++i)
        if (a[i] != b[i]) ++out[may_change(chain, d, b[i]) ? 0 : 1];
}

/* how->beta, step_size and base are not used: settling finds them. changed: words of the state that keeping moved, of
 * the point and counters (0) and others (1). learned: step size, beta. Returns a status, or 1000 when the summary or
 * the base metric moved. */
EXPORT int settle_and_keep(const plan *how, size_t d, fw_density density, fw_hessian_product product, void *context,
                           const double *x, size_t settle, size_t keep, uint64_t number, int32_t changed[2], double learned[2])
{
    const fw_target target = {d, density, context, product, context};
    stream r;
    stream_begin(&r, number);
    fw_chain *chain = settling_chain(how, &target, &r, settle);
    if (!chain) return FW_BAD_ARGUMENT;
    size_t done;
    fw_summary before, after;
    changed[0] = changed[1] = 0;
    int status = fw_chain_start(chain, x);
    /* some transitions at the start may not count as settling; a settling chain returns when it has settled */
    if (status == FW_OK) status = fw_chain_run(chain, 10 * settle, NULL, &done);
    if (status == FW_OK && !fw_chain_settled(chain)) status = FW_NOT_STARTED;
    const size_t size = fw_chain_state_bytes(chain);
    uint64_t *bytes = calloc(2, size);
    double *base = calloc(d + FW_MAX_DIRECTIONS * (d + 1), sizeof *base);
    if (!bytes || !base) status = FW_NO_MEMORY;
    if (status == FW_OK) {
        fw_chain_summary(chain, &before);
        same_base(chain, d, base, 0);
        status = fw_chain_export(chain, bytes, size);
    }
    if (status == FW_OK) status = fw_chain_run(chain, keep, NULL, &done);
    if (status == FW_OK && fw_chain_state_bytes(chain) != size) status = FW_BAD_STATE;
    if (status == FW_OK) status = fw_chain_export(chain, bytes + size / 8, size);
    if (status == FW_OK) {
        fw_chain_summary(chain, &after);
        words_changed(chain, d, bytes, bytes + size / 8, size / 8, changed);
        learned[0] = after.step_size;
        learned[1] = after.beta;
        if (!grown_only(&before, &after) || !same_base(chain, d, base, 1)) status = 1000;
    }
    free(base);
    free(bytes);
    fw_chain_free(chain);
    return status;
}
