/*
 * threads.h: a run hook on POSIX threads, to hold against the OpenMP one. Threads are made for each call; blocks are handed
 * out through a mutex, from the last to the first, so that the order differs from the serial one.
 */
#ifndef CHECK_THREADS_INCLUDED
#define CHECK_THREADS_INCLUDED

#include <pthread.h>
#include "whorl_core.h"

typedef struct check_pool {
    whorl_body_function body;
    void *argument;
    uint64_t left;
    int32_t worker;
    pthread_mutex_t lock;
} check_pool;

static inline void *check_pool_thread(void *argument)
{
    check_pool *pool = (check_pool *)argument;
    int32_t worker;
    pthread_mutex_lock(&pool->lock);
    worker = pool->worker++;
    while (pool->left > 0) {
        uint64_t block = --pool->left;
        pthread_mutex_unlock(&pool->lock);
        pool->body(pool->argument, block, worker);
        pthread_mutex_lock(&pool->lock);
    }
    pthread_mutex_unlock(&pool->lock);
    return NULL;
}

static inline void check_pthread_run(void *context, whorl_body_function body, void *argument, uint64_t blocks,
                                     int32_t workers)
{
    pthread_t thread[64];
    check_pool pool;
    int32_t made = 0, i;
    (void)context;
    pool.body = body;
    pool.argument = argument;
    pool.left = blocks;
    pool.worker = 0;
    pthread_mutex_init(&pool.lock, NULL);
    for (i = 1; i < workers && i < 64; i++)
        if (pthread_create(&thread[made], NULL, check_pool_thread, &pool) == 0)
            made++;
    check_pool_thread(&pool);
    for (i = 0; i < made; i++)
        pthread_join(thread[i], NULL);
    pthread_mutex_destroy(&pool.lock);
}

#endif
