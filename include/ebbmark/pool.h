/*
 * A pool of worker threads with two uses: independent jobs in a bounded queue, and a loop over
 * blocks whose results do not depend on the number of threads.
 */
#ifndef EBBMARK_POOL_H
#define EBBMARK_POOL_H

#include <stdbool.h>
#include <stddef.h>

#include "ebbmark/error.h"

struct base_pool;

/* Start `threads` workers (1 to 256) and a queue of at most `queue_limit` waiting jobs. The caller
 * closes it. */
bool base_pool_open(struct base_pool **out, unsigned threads, size_t queue_limit,
                    struct base_error *error);

/* Finish what is queued, join the threads, free. NULL is allowed. */
void base_pool_close(struct base_pool *pool);

/* Queue work(context) for some worker. False (BASE_BUSY) when the queue is full. Thread-safe. */
bool base_pool_submit(struct base_pool *pool, void (*work)(void *context), void *context,
                      struct base_error *error);

/* Call block(context, i) once for each i in 0 … count-1, spread over the workers and the calling
 * thread, and return when all are done. Order is not defined: each block writes only its own
 * output, and the caller sums outputs in block order, so that the bits do not depend on the number
 * of threads. `pool` may be NULL: then the blocks run here, in order. Several threads may call it
 * at once; it must not be called from inside a block. */
void base_pool_for(struct base_pool *pool, size_t count, void (*block)(void *context, size_t i),
                   void *context);

#endif
