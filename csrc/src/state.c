/* The whole state of a chain as 8-byte words. One function visits everything, for measuring, export, import and the
 * checksum alike, so the four cannot drift apart. */
#include <math.h>
#include <string.h>

#include "chain.h"

enum mode { MEASURE, WRITE, READ };

typedef struct cursor {
    enum mode mode;
    unsigned char *bytes;
    size_t at;
    int mismatch; /* a word that had to be equal was not */
} cursor;

static const uint64_t magic = UINT64_C(0x0001004b4c415746); /* "FWALK", layout 1; differs when bytes are swapped */

static void visit(cursor *c, void *data, size_t words)
{
    const size_t size = 8 * words;
    if (c->mode == WRITE) memcpy(c->bytes + c->at, data, size);
    if (c->mode == READ) memcpy(data, c->bytes + c->at, size);
    c->at += size;
}

static void number(cursor *c, uint64_t *x) { visit(c, x, 1); }

static void equal(cursor *c, uint64_t word)
{
    uint64_t seen = word;
    number(c, &seen);
    if (seen != word) c->mismatch = 1;
}

static void equal_real(cursor *c, double x)
{
    uint64_t word;
    memcpy(&word, &x, 8);
    equal(c, word);
}

static void equal_name(cursor *c, const char *name)
{
    uint64_t word = UINT64_C(1469598103934665603);
    for (; *name; ++name) word = (word ^ (uint64_t)(unsigned char)*name) * UINT64_C(1099511628211);
    equal(c, word);
}

static void visit_settings(cursor *c, const fw_chain *chain)
{
    const fw_settings *s = &chain->settings;
    equal(c, magic);
    equal(c, (uint64_t)chain->walk.d);
    equal_name(c, s->motion);
    equal_name(c, s->path);
    equal(c, (uint64_t)s->scheme);
    equal(c, (uint64_t)s->curvature);
    equal_real(c, s->bend);
    equal_real(c, s->beta);
    equal(c, (uint64_t)s->steps);
    equal(c, (uint64_t)s->doublings);
    equal(c, (uint64_t)s->turn);
    equal(c, (uint64_t)s->halvings);
    equal_real(c, s->halving_bound);
    equal_real(c, s->acceptance);
    equal(c, (uint64_t)s->rank);
    equal(c, (uint64_t)s->rank_fixed);
    equal(c, (uint64_t)s->adapt_step);
    equal(c, (uint64_t)s->adapt_scale);
}

/* learn consists of 8-byte members only, so it is words without padding */
_Static_assert(sizeof(fw_learn) % 8 == 0 && sizeof(double) == 8 && sizeof(uint64_t) == 8, "words of 8 bytes");

static void visit_state(cursor *c, fw_chain *chain)
{
    fw_walk *walk = &chain->walk;
    const size_t d = walk->d;
    uint64_t k = (uint64_t)walk->base.k;
    visit_settings(c, chain);
    number(c, &chain->started);
    number(c, &chain->transitions);
    number(c, &walk->gradients);
    number(c, &walk->products);
    number(c, &walk->halved);
    visit(c, &chain->step_size, 1);
    visit(c, &walk->beta, 1);
    visit(c, &chain->value, 1);
    visit(c, &walk->base.log_det, 1);
    visit(c, &chain->learn, sizeof(fw_learn) / 8);
    visit(c, chain->x, d);
    visit(c, chain->g, d);
    visit(c, walk->base.r, d);
    number(c, &k);
    if (c->mode == READ) walk->base.k = (size_t)k;
    visit(c, walk->base.lambda, FW_MAX_DIRECTIONS);
    if (walk->base.k) visit(c, walk->base.directions, walk->base.k * d);
    if (chain->learn.settled) return;
    visit(c, chain->mean_x, d);
    visit(c, chain->roots_x, d);
    visit(c, chain->mean_g, d);
    visit(c, chain->roots_g, d);
    if (!chain->rows_x) return;
    visit(c, chain->rows_x, chain->learn.rows * d);
    visit(c, chain->rows_g, chain->learn.rows * d);
}

static uint64_t checksum(const unsigned char *bytes, size_t size)
{
    uint64_t sum = UINT64_C(0x9e3779b97f4a7c15), word;
    for (size_t at = 0; at + 8 <= size; at += 8) {
        memcpy(&word, bytes + at, 8);
        sum = (sum ^ word) * UINT64_C(0xff51afd7ed558ccd);
        sum ^= sum >> 32;
    }
    return sum;
}

size_t fw_chain_state_bytes(const fw_chain *chain)
{
    cursor c = {MEASURE, NULL, 0, 0};
    visit_state(&c, (fw_chain *)chain);
    return c.at + 8;
}

int fw_chain_export(const fw_chain *chain, void *bytes, size_t size)
{
    if (size != fw_chain_state_bytes(chain)) return FW_BAD_ARGUMENT;
    cursor c = {WRITE, bytes, 0, 0};
    visit_state(&c, (fw_chain *)chain);
    const uint64_t sum = checksum(bytes, c.at);
    memcpy(c.bytes + c.at, &sum, 8);
    return FW_OK;
}

/* Size of the state that these bytes, whose settings agree, say they hold: settling decides what is there. 0: no such state. */
static size_t expected_size(const fw_chain *chain, const unsigned char *bytes, size_t size, size_t settings)
{
    const size_t at = settings + 8 * 9;
    fw_chain copy = *chain;
    const size_t words = 3 * chain->walk.d; /* x, g, r stand between what was learned and the number of directions */
    uint64_t k;
    memcpy(&copy.learn, bytes + at, sizeof copy.learn);
    if (at + sizeof copy.learn + 8 * (words + 1) > size) return 0;
    memcpy(&k, bytes + at + sizeof copy.learn + 8 * words, 8);
    if (copy.learn.rows > FW_WINDOW_ROWS || k > chain->settings.rank) return 0;
    copy.walk.base.k = (size_t)k;
    return fw_chain_state_bytes(&copy);
}

int fw_chain_import(fw_chain *chain, const void *bytes, size_t size)
{
    /* every check comes before the first word of the chain changes */
    uint64_t sum;
    cursor measure = {MEASURE, NULL, 0, 0}, compare = {READ, (unsigned char *)bytes, 0, 0};
    visit_settings(&measure, chain);
    if (size < measure.at + 8 * 10 + sizeof(fw_learn) || size % 8 != 0) return FW_BAD_STATE;
    memcpy(&sum, (const unsigned char *)bytes + size - 8, 8);
    if (sum != checksum(bytes, size - 8)) return FW_BAD_STATE;
    visit_settings(&compare, chain);
    if (compare.mismatch) return FW_BAD_STATE;
    cursor read = {READ, (unsigned char *)bytes, 0, 0};
    if (size != expected_size(chain, bytes, size, measure.at)) return FW_BAD_STATE;
    visit_state(&read, chain);
    return read.at + 8 == size ? FW_OK : FW_BAD_STATE;
}
