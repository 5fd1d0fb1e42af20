/* Makes what the library asks for fail on purpose: the Makefile renames, in a copy of libflatgain.a, the
 * calls of malloc, calloc, realloc, free, strndup, pthread_create and of the functions of NLopt and libyaml
 * that need memory to refusing_malloc and so on, which are here. Other allocations inside shared libraries
 * stay as they are. Source of the idea: the memory tests of CSparse (T. A. Davis, Direct Methods for Sparse
 * Linear Systems, SIAM 2006), where the n-th allocation fails, n = 0, 1, 2, ... */
#ifndef TESTS_ALLOCATIONS_H
#define TESTS_ALLOCATIONS_H

#include <stdbool.h>
#include <stddef.h>

/* From now on the n-th allocation (from 0; -1: none) fails; with `all_later` every one after it, too. */
void allocations_fail(long n, bool all_later);
/* Ends that; returns how many were refused. */
long allocations_end(void);
/* How many were asked for between the two. */
long allocations_seen(void);
/* Pieces of memory handed out and not given back since the start of the program. */
long allocations_alive(void);
/* Every pthread_create fails from now on, or works again. */
void threads_fail(bool fail);
/* The same allocator, for libraries that accept one. */
void *refusing_malloc(size_t size);
void refusing_free(void *at);

#endif
