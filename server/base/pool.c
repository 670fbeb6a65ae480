#include "ebbmark/pool.h"

#include <assert.h>
#include <pthread.h>
#include <stdlib.h>

struct job {
    void (*work)(void *context);
    void *context;
};

/* One base_pool_for at work. Lives on the caller's stack; on the pool's list until all its blocks
 * are taken. */
struct loop {
    void (*block)(void *context, size_t i);
    void *context;
    size_t count, taken, finished;
    pthread_cond_t done;
    struct loop *next;
};

struct base_pool {
    pthread_mutex_t lock; /* guards everything below */
    pthread_cond_t wake;
    struct job *jobs; /* a ring of queue_limit */
    size_t queue_limit, first, waiting;
    struct loop *loops;
    bool closing;
    unsigned threads;
    pthread_t *workers;
};

static void loop_remove(struct base_pool *pool, struct loop *loop)
{
    for (struct loop **at = &pool->loops; *at != NULL; at = &(*at)->next)
        if (*at == loop) {
            *at = loop->next;
            return;
        }
}

/* Take and run one block of the loop; the lock is held on entry and on return. */
static void loop_step(struct base_pool *pool, struct loop *loop)
{
    size_t i = loop->taken++;
    if (loop->taken == loop->count)
        loop_remove(pool, loop);
    (void)pthread_mutex_unlock(&pool->lock);
    loop->block(loop->context, i);
    (void)pthread_mutex_lock(&pool->lock);
    if (++loop->finished == loop->count)
        (void)pthread_cond_signal(&loop->done);
}

static void *worker(void *argument)
{
    struct base_pool *pool = argument;
    (void)pthread_mutex_lock(&pool->lock);
    for (;;) {
        if (pool->loops != NULL) {
            loop_step(pool, pool->loops);
        } else if (pool->waiting > 0) {
            struct job job = pool->jobs[pool->first];
            pool->first = (pool->first + 1) % pool->queue_limit;
            pool->waiting--;
            (void)pthread_mutex_unlock(&pool->lock);
            job.work(job.context);
            (void)pthread_mutex_lock(&pool->lock);
        } else if (pool->closing) {
            break;
        } else {
            (void)pthread_cond_wait(&pool->wake, &pool->lock);
        }
    }
    (void)pthread_mutex_unlock(&pool->lock);
    return NULL;
}

bool base_pool_open(struct base_pool **out, unsigned threads, size_t queue_limit,
                    struct base_error *error)
{
    assert(threads >= 1 && threads <= 256 && queue_limit >= 1);
    *out = NULL;
    struct base_pool *pool = calloc(1, sizeof *pool);
    if (pool == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the worker threads.");
    pool->queue_limit = queue_limit;
    pool->jobs = calloc(queue_limit, sizeof *pool->jobs);
    pool->workers = calloc(threads, sizeof *pool->workers);
    (void)pthread_mutex_init(&pool->lock, NULL);
    (void)pthread_cond_init(&pool->wake, NULL);
    bool ok = pool->jobs != NULL && pool->workers != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory for the worker threads.");
    while (ok && pool->threads < threads) {
        int failed = pthread_create(&pool->workers[pool->threads], NULL, worker, pool);
        if (failed != 0)
            ok = base_fail_errno(error, failed, "Starting a worker thread");
        else
            pool->threads++;
    }
    if (!ok) {
        base_pool_close(pool);
        return false;
    }
    *out = pool;
    return true;
}

void base_pool_close(struct base_pool *pool)
{
    if (pool == NULL)
        return;
    (void)pthread_mutex_lock(&pool->lock);
    pool->closing = true;
    (void)pthread_cond_broadcast(&pool->wake);
    (void)pthread_mutex_unlock(&pool->lock);
    for (unsigned i = 0; i < pool->threads; i++)
        (void)pthread_join(pool->workers[i], NULL);
    (void)pthread_cond_destroy(&pool->wake);
    (void)pthread_mutex_destroy(&pool->lock);
    free(pool->workers);
    free(pool->jobs);
    free(pool);
}

bool base_pool_submit(struct base_pool *pool, void (*work)(void *context), void *context,
                      struct base_error *error)
{
    (void)pthread_mutex_lock(&pool->lock);
    bool room = pool->waiting < pool->queue_limit && !pool->closing;
    if (room) {
        pool->jobs[(pool->first + pool->waiting) % pool->queue_limit] = (struct job){work, context};
        pool->waiting++;
        (void)pthread_cond_signal(&pool->wake);
    }
    (void)pthread_mutex_unlock(&pool->lock);
    return room || base_fail(error, BASE_BUSY, "Too much is waiting to be done (limit %zu).",
                             pool->queue_limit);
}

void base_pool_for(struct base_pool *pool, size_t count, void (*block)(void *context, size_t i),
                   void *context)
{
    if (pool == NULL || count <= 1) {
        for (size_t i = 0; i < count; i++)
            block(context, i);
        return;
    }
    struct loop loop = {.block = block, .context = context, .count = count};
    (void)pthread_cond_init(&loop.done, NULL);
    (void)pthread_mutex_lock(&pool->lock);
    loop.next = pool->loops;
    /* It is off the list again before this function returns. */
    /* cppcheck-suppress autoVariables */
    pool->loops = &loop;
    (void)pthread_cond_broadcast(&pool->wake);
    while (loop.taken < loop.count)
        loop_step(pool, &loop);
    while (loop.finished < loop.count)
        (void)pthread_cond_wait(&loop.done, &pool->lock);
    (void)pthread_mutex_unlock(&pool->lock);
    (void)pthread_cond_destroy(&loop.done);
}
