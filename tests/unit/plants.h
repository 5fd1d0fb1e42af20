/* Random plants and patterns for tests. */
#ifndef TESTS_PLANTS_H
#define TESTS_PLANTS_H

#include "plant/model.h"

double random_uniform(void); /* (-1, 1), xorshift64, one stream per process */
double random_normal(void);
void random_seed(unsigned long long seed);

struct fg_plant empty_plant(struct fg_arena *arena, bool discrete, int n, int m, int p);
/* n 2..6, m, p 1..3; odd trials discrete; every third with D, every fourth (discrete) with V, N always. */
struct fg_plant random_plant(struct fg_arena *arena, int trial);
/* Of stated shape: poles spread around the stability boundary, all weights full. */
struct fg_plant random_plant_of(struct fg_arena *arena, bool discrete, int n, int m, int p);

struct fg_pattern free_pattern(struct fg_arena *arena, int m, int p);
/* Free, or with fixed and tied entries, by trial. */
struct fg_pattern random_pattern(struct fg_arena *arena, int m, int p, int trial);

#endif
