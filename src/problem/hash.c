/* FNV-1a (Fowler, Noll, Vo), 64 bits: h = (h xor byte) * 1099511628211. */
#include "problem/check.h"

#include <string.h>

static uint64_t add_bits(uint64_t hash, uint64_t bits)
{
    for (int i = 0; i < 8; i++) { /* least significant byte first on every machine */
        hash ^= bits & 0xff;
        hash *= UINT64_C(1099511628211);
        bits >>= 8;
    }
    return hash;
}

static uint64_t add_double(uint64_t hash, double value)
{
    uint64_t bits;
    value = value == 0 ? 0.0 : value; /* -0 and 0 are one number */
    memcpy(&bits, &value, sizeof bits);
    if (value != value)
        bits = UINT64_C(0x7ff8000000000000); /* NaN ("not stated") whatever its payload */
    return add_bits(hash, bits);
}

static uint64_t add_doubles(uint64_t hash, size_t count, const double *at)
{
    for (size_t i = 0; i < count; i++)
        hash = add_double(hash, at[i]);
    return hash;
}

static uint64_t add_matrix(uint64_t hash, struct fg_matrix a)
{
    hash = add_bits(add_bits(hash, (uint64_t)a.rows), (uint64_t)a.cols);
    return add_doubles(hash, (size_t)a.rows * (size_t)a.cols, a.at);
}

static uint64_t add_text(uint64_t hash, const char *text)
{
    size_t length = strlen(text);
    hash = add_bits(hash, length);
    for (size_t i = 0; i < length; i++) {
        hash ^= (unsigned char)text[i];
        hash *= UINT64_C(1099511628211);
    }
    return hash;
}

static uint64_t add_signals(uint64_t hash, int count, const struct fg_signal *signals)
{
    for (int i = 0; i < count; i++) {
        hash = add_text(hash, signals[i].name);
        hash = add_text(hash, signals[i].unit);
        hash = add_double(hash, signals[i].lag);
        hash = add_bits(hash, signals[i].lag_in_plc);
    }
    return hash;
}

uint64_t fg_problem_hash(const struct flatgain_problem *problem)
{
    const struct fg_matrix all[] = {problem->A, problem->B, problem->C, problem->D, problem->W,
                                    problem->V, problem->Q, problem->R, problem->N};
    const struct fg_pattern *pattern = &problem->pattern;
    size_t entries = (size_t)problem->m * (size_t)problem->p;
    uint64_t hash = UINT64_C(14695981039346656037);
    hash = add_bits(hash, problem->setting);
    hash = add_bits(hash, problem->reading);
    for (size_t i = 0; i < sizeof all / sizeof *all; i++)
        hash = add_matrix(hash, all[i]);
    hash = add_text(hash, problem->time_unit);
    hash = add_signals(hash, problem->m, problem->inputs);
    hash = add_signals(hash, problem->p, problem->outputs);
    hash = add_signals(hash, problem->n, problem->states);
    hash = add_bits(hash, (uint64_t)pattern->count);
    for (size_t i = 0; i < entries; i++)
        hash = add_bits(hash, (uint64_t)(int64_t)pattern->index[i]);
    hash = add_doubles(hash, entries, pattern->sign);
    hash = add_doubles(hash, entries, pattern->fixed);
    hash = add_doubles(hash, (size_t)pattern->count, pattern->lower);
    hash = add_doubles(hash, (size_t)pattern->count, pattern->upper);
    hash = add_bits(hash, problem->has_today);
    if (problem->has_today)
        hash = add_matrix(hash, problem->today);
    return add_double(hash, problem->accept_percent);
}
