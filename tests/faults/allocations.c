#include "allocations.h"

#include <errno.h>
#include <nlopt.h>
#include <pthread.h>
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>
#include <yaml.h>

void *refusing_calloc(size_t count, size_t size);
void *refusing_realloc(void *at, size_t size);
char *refusing_strndup(const char *text, size_t length);
int refusing_pthread_create(pthread_t *thread, const pthread_attr_t *how, void *(*run)(void *),
                            void *argument);
nlopt_opt refusing_nlopt_create(nlopt_algorithm algorithm, unsigned count);
int refusing_yaml_parser_initialize(yaml_parser_t *parser);
int refusing_yaml_parser_parse(yaml_parser_t *parser, yaml_event_t *event);

static atomic_bool armed, later, no_threads;
static atomic_long target, seen, refused, alive;

void allocations_fail(long n, bool all_later)
{
    atomic_store(&target, n);
    atomic_store(&seen, 0);
    atomic_store(&refused, 0);
    atomic_store(&later, all_later && n >= 0);
    atomic_store(&armed, true);
}

long allocations_end(void)
{
    atomic_store(&armed, false);
    return atomic_load(&refused);
}

long allocations_seen(void)
{
    return atomic_load(&seen);
}

long allocations_alive(void)
{
    return atomic_load(&alive);
}

void threads_fail(bool fail)
{
    atomic_store(&no_threads, fail);
}

static bool refuse(void)
{
    if (!atomic_load(&armed))
        return false;
    long now = atomic_fetch_add(&seen, 1), n = atomic_load(&target);
    if (now != n && !(atomic_load(&later) && now > n))
        return false;
    atomic_fetch_add(&refused, 1);
    errno = ENOMEM;
    return true;
}

static void *counted(void *at)
{
    if (at)
        atomic_fetch_add(&alive, 1);
    return at;
}

void *refusing_malloc(size_t size)
{
    return refuse() ? NULL : counted(malloc(size));
}

void *refusing_calloc(size_t count, size_t size)
{
    return refuse() ? NULL : counted(calloc(count, size));
}

void *refusing_realloc(void *at, size_t size)
{
    if (refuse())
        return NULL;
    void *moved = realloc(at, size);
    return at ? moved : counted(moved);
}

void refusing_free(void *at)
{
    if (at)
        atomic_fetch_sub(&alive, 1);
    free(at);
}

char *refusing_strndup(const char *text, size_t length)
{
    size_t size = strnlen(text, length);
    char *copy = refusing_malloc(size + 1);
    if (copy) {
        memcpy(copy, text, size);
        copy[size] = '\0';
    }
    return copy;
}

int refusing_pthread_create(pthread_t *thread, const pthread_attr_t *how, void *(*run)(void *),
                            void *argument)
{
    return atomic_load(&no_threads) ? EAGAIN : pthread_create(thread, how, run, argument);
}

/* What the libraries do when their own allocations fail. */

nlopt_opt refusing_nlopt_create(nlopt_algorithm algorithm, unsigned count)
{
    return refuse() ? NULL : nlopt_create(algorithm, count);
}

int refusing_yaml_parser_initialize(yaml_parser_t *parser)
{
    return refuse() ? 0 : yaml_parser_initialize(parser);
}

int refusing_yaml_parser_parse(yaml_parser_t *parser, yaml_event_t *event)
{
    if (!refuse())
        return yaml_parser_parse(parser, event);
    memset(event, 0, sizeof *event);
    parser->error = YAML_MEMORY_ERROR;
    return 0;
}
