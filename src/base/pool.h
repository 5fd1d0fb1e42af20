/* Runs `work(context of this thread, index)` for index = 0 .. count - 1 on several threads. Which thread
 * takes which index is not defined, so results go by index. One thread, or a thread that cannot be
 * made: the calling thread does the work. */
#ifndef FG_BASE_POOL_H
#define FG_BASE_POOL_H

/* contexts: one per thread, `threads` of them. */
void fg_pool_run(int threads, void **contexts, int count, void (*work)(void *context, int index));

/* Processors this process may use, at least 1. */
int fg_pool_processors(void);

#endif
