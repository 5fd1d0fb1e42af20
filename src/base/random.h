/* Random numbers that depend on (seed, stream) only: one stream per start, so that neither threads nor
 * the order of work change them. SplitMix64 (Steele, Lea, Flood, OOPSLA 2014) as generator. */
#ifndef FG_BASE_RANDOM_H
#define FG_BASE_RANDOM_H

#include <stdint.h>

struct fg_random {
    uint64_t state;
};

struct fg_random fg_random_stream(uint64_t seed, uint64_t stream);
double fg_random_uniform(struct fg_random *random); /* in (0, 1) */
double fg_random_normal(struct fg_random *random);  /* mean 0, variance 1 (Box, Muller 1958) */

#endif
