#include "base/random.h"

#include <math.h>

static uint64_t mix(uint64_t z)
{
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9ULL;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebULL;
    return z ^ (z >> 31);
}

struct fg_random fg_random_stream(uint64_t seed, uint64_t stream)
{
    return (struct fg_random){mix(seed + 0x9e3779b97f4a7c15ULL) ^ mix(stream * 0xd1342543de82ef95ULL + 1)};
}

double fg_random_uniform(struct fg_random *random)
{
    random->state += 0x9e3779b97f4a7c15ULL;
    return ((double)(mix(random->state) >> 11) + 0.5) / 9007199254740992.0;
}

double fg_random_normal(struct fg_random *random)
{
    double r = sqrt(-2 * log(fg_random_uniform(random)));
    return r * cos(6.283185307179586 * fg_random_uniform(random));
}
