#include "base/pool.h"

#include <pthread.h>
#include <sched.h>
#include <stdatomic.h>
#include <stdbool.h>

enum { MAX_THREADS = 256 };

struct job {
    atomic_int next;
    int count;
    void (*work)(void *, int);
};

struct worker {
    struct job *job;
    void *context;
    pthread_t thread;
    bool running;
};

static void *run(void *argument)
{
    struct worker *worker = argument;
    for (;;) {
        int index = atomic_fetch_add(&worker->job->next, 1);
        if (index >= worker->job->count)
            return NULL;
        worker->job->work(worker->context, index);
    }
}

void fg_pool_run(int threads, void **contexts, int count, void (*work)(void *context, int index))
{
    struct job job = {.count = count, .work = work};
    atomic_init(&job.next, 0);
    if (threads > MAX_THREADS)
        threads = MAX_THREADS;
    if (threads > count)
        threads = count;
    struct worker workers[MAX_THREADS];
    for (int i = 1; i < threads; i++) {
        workers[i] = (struct worker){.job = &job, .context = contexts[i]};
        workers[i].running = pthread_create(&workers[i].thread, NULL, run, &workers[i]) == 0;
    }
    workers[0] = (struct worker){.job = &job, .context = contexts[0]};
    run(&workers[0]);
    for (int i = 1; i < threads; i++)
        if (workers[i].running)
            pthread_join(workers[i].thread, NULL);
}

int fg_pool_processors(void)
{
    cpu_set_t set;
    CPU_ZERO(&set);
    if (sched_getaffinity(0, sizeof set, &set) != 0)
        return 1;
    int count = CPU_COUNT(&set);
    return count > 0 ? count : 1;
}
