#include "design/records.h"

#include <math.h>

/* Two minima are one when their costs agree to this, relative. */
static const double SAME_COST = 1e-6;
/* Hessian and gradient below this, relative to J in natural units: J does not depend on the gain. */
static const double FLAT = 1e-6;

int fg_records_distinct(const struct fg_record *records, int count, double negligible, int *representative,
                        int *hits, int *converged)
{
    int distinct = 0;
    *converged = 0;
    for (int i = 0; i < count; i++) {
        const struct fg_record *r = &records[i];
        if (!r->done || !r->stabilised || r->local.end != FG_LOCAL_MINIMUM)
            continue;
        ++*converged;
        int k = 0;
        for (; k < distinct; k++) {
            double J = records[representative[k]].local.J;
            if (fabs(r->local.J - J) <= SAME_COST * fabs(J) + negligible)
                break;
        }
        if (k < distinct) {
            hits[k]++;
            if (r->local.residual < records[representative[k]].local.residual)
                representative[k] = i;
            continue;
        }
        for (k = distinct++; k > 0 && records[representative[k - 1]].local.J > r->local.J; k--) {
            representative[k] = representative[k - 1];
            hits[k] = hits[k - 1];
        }
        representative[k] = i;
        hits[k] = 1;
    }
    return distinct;
}

double fg_expected_minima(int w, int n)
{
    return n > w + 2 ? w * (n - 1.0) / (n - w - 2.0) : INFINITY;
}

int fg_records_best(const struct fg_record *records, int count)
{
    int best = -1;
    for (int i = 0; i < count; i++) {
        const struct fg_record *r = &records[i];
        if (!r->stabilised || !isfinite(r->local.J))
            continue;
        if (best < 0) {
            best = i;
            continue;
        }
        double J = records[best].local.J, same = SAME_COST * fabs(J);
        bool converged = r->local.end == FG_LOCAL_MINIMUM, held = records[best].local.end == FG_LOCAL_MINIMUM;
        if (r->local.J < J - same || (r->local.J <= J + same && converged && !held) ||
            (converged == held && r->local.J < J && r->local.J < J - 1e-12 * fabs(J)))
            best = i;
    }
    return best;
}

int fg_records_least_unstable(const struct fg_record *records, int count)
{
    int best = -1;
    for (int i = 0; i < count; i++)
        if (records[i].done && !isnan(records[i].abscissa) &&
            (best < 0 || records[i].abscissa < records[best].abscissa))
            best = i;
    return best;
}

enum fg_search_end fg_records_end(const struct fg_record *records, int count, int index)
{
    const struct fg_record *best = &records[index];
    switch (best->local.end) {
    case FG_LOCAL_BOUNDARY:
        return FG_SEARCH_BOUNDARY;
    case FG_LOCAL_UNBOUNDED:
        return FG_SEARCH_UNBOUNDED;
    case FG_LOCAL_MINIMUM:
        break;
    default:
        return FG_SEARCH_STALLED;
    }
    if (best->local.largest > FLAT || best->local.at_bound > 0)
        return FG_SEARCH_MINIMUM;
    for (int i = 0; i < count; i++)
        if (records[i].stabilised && records[i].local.J > best->local.J * (1 + SAME_COST))
            return FG_SEARCH_MINIMUM;
    return FG_SEARCH_FLAT;
}

int fg_records_stabilised(const struct fg_record *records, int count)
{
    int stabilised = 0;
    for (int i = 0; i < count; i++)
        stabilised += records[i].stabilised;
    return stabilised;
}
