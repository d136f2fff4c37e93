/* The jittered path, and the list of paths. */
#include <math.h>
#include <string.h>

#include "chain.h"

const fw_path *fw_path_named(const char *name)
{
    static const fw_path *const paths[] = {&fw_jittered, &fw_nouturn};
    for (size_t i = 0; name && i < sizeof paths / sizeof *paths; ++i)
        if (strcmp(paths[i]->name, name) == 0) return paths[i];
    return NULL;
}

static int travel(fw_chain *chain, const fw_route *route, fw_facts *facts)
{
    fw_walk *walk = &chain->walk;
    fw_point *p = &chain->end[0];
    const size_t most = route->steps;
    size_t steps = 1 + (size_t)(chain->random.uniform(chain->random.state) * (double)most);
    if (steps > most) steps = most;
    if (route->finer) steps *= 2;
    const double start = p->energy;
    double low = 0.0, high = 0.0, weight = 0.0;
    int status = FW_OK;
    for (size_t i = 0; i < steps; ++i) {
        ++facts->steps;
        status = fw_walk_step_in_row(walk, p, route->step_size, i == 0, i + 1 == steps);
        if (status != FW_OK) break;
        weight = start - p->energy + p->log_jacobian;
        if (weight < low) low = weight;
        if (weight > high) high = weight;
        if (high - low > 1000.0) {
            fw_walk_failed(walk, p->x);
            status = FW_WEIGHT_RANGE;
            break;
        }
    }
    if (status < 0) return status;
    facts->failure = status;
    facts->log_weight_range = high - low;
    facts->acceptance = status == FW_OK ? (weight < 0.0 ? exp(weight) : 1.0) : 0.0;
    facts->energy = start;
    if (chain->random.uniform(chain->random.state) < facts->acceptance) {
        facts->energy = p->energy;
        fw_chain_take(chain, p->x, p->g, p->value);
    }
    return FW_OK;
}

const fw_path fw_jittered = {
    .name = "jittered",
    .source = "number of steps uniform on 1..n (Mackenze 1989; Neal 2011)",
    .travel = travel,
};
