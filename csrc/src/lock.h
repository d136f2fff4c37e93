/* The smallest lock, for the binding: threads hold it while they copy a few vectors, never longer. (The core itself has
 * no threads and needs none.) An exchange and a store cost some nanoseconds, where a lock of the system costs forty;
 * that counts because it is taken once a transition.
 */
#ifndef FW_LOCK_H
#define FW_LOCK_H

typedef struct fw_lock {
    volatile long held;
} fw_lock;

#if defined(_MSC_VER) && !defined(__clang__)
#include <intrin.h>
static inline void fw_lock_take(fw_lock *lock)
{
    while (_InterlockedExchange(&lock->held, 1)) {}
}
static inline void fw_lock_give(fw_lock *lock) { _InterlockedExchange(&lock->held, 0); }
#else
#include <sched.h>
static inline void fw_lock_take(fw_lock *lock)
{
    while (__atomic_exchange_n(&lock->held, 1, __ATOMIC_ACQUIRE)) sched_yield();
}
static inline void fw_lock_give(fw_lock *lock) { __atomic_store_n(&lock->held, 0, __ATOMIC_RELEASE); }
#endif

#endif
