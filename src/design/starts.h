/* Where the searches begin. Random gains alone miss minima that LQR gains projected on the measurements
 * reach, and the other way round, so both kinds are used in turn. */
#ifndef FG_DESIGN_STARTS_H
#define FG_DESIGN_STARTS_H

#include "design/scaling.h"

/* theta (q) of start `index` in natural units; depends on (seed, index) only. today_theta may be NULL.
 *   0: no control; 1: the gain in use now, else the LQR gain projected on the measurements;
 *   2, 3, ...: in turn projected LQR gains with random weights and random gains of random size.
 * Returns NO_MEMORY or OK. */
flatgain_status fg_start(const struct fg_scaled *scaled, const double *today_theta, uint64_t seed, int index,
                         double *theta);

#endif
