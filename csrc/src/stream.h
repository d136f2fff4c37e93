/* NumPy's PCG64DXSM, number for number, for the binding (the core itself takes any stream through fw_random).
 *
 * A 128-bit linear congruential generator with the 64-bit multiplier below, its output permuted by DXSM (O'Neill, the
 * pcg-cpp library, 2019; NumPy 1.21). Here instead of behind NumPy's pointers, a number costs one call less, and going
 * back to a mark is a copy of the state.
 */
#ifndef FW_STREAM_H
#define FW_STREAM_H

#include <stdint.h>

typedef struct fw_stream {
    uint64_t low, high;         /* state */
    uint64_t inc_low, inc_high; /* increment, odd */
    uint64_t marked_low, marked_high;
} fw_stream;

#define FW_STREAM_MULTIPLIER UINT64_C(0xda942042e4dd58b5)

static inline uint64_t fw_stream_product(uint64_t a, uint64_t b, uint64_t *high)
{
#ifdef __SIZEOF_INT128__
    __extension__ typedef unsigned __int128 wide;
    const wide p = (wide)a * b;
    *high = (uint64_t)(p >> 64);
    return (uint64_t)p;
#else
    const uint64_t a0 = (uint32_t)a, a1 = a >> 32, b0 = (uint32_t)b, b1 = b >> 32;
    const uint64_t middle = a1 * b0 + ((a0 * b0) >> 32), other = a0 * b1 + (uint32_t)middle;
    *high = a1 * b1 + (middle >> 32) + (other >> 32);
    return a * b;
#endif
}

static inline uint64_t fw_stream_next(fw_stream *s)
{
    const uint64_t low = s->low, high = s->high;
    uint64_t out = high ^ (high >> 32), carried;
    out *= FW_STREAM_MULTIPLIER;
    out ^= out >> 48;
    out *= low | 1;
    s->low = fw_stream_product(low, FW_STREAM_MULTIPLIER, &carried) + s->inc_low;
    s->high = carried + high * FW_STREAM_MULTIPLIER + s->inc_high + (s->low < s->inc_low);
    return out;
}

/* 53 bits in [0, 1) */
static inline double fw_stream_uniform(fw_stream *s) { return (double)(fw_stream_next(s) >> 11) * 0x1p-53; }

#endif
