#include "design/search.h"

#include <math.h>
#include <stdatomic.h>
#include <string.h>

#include "base/pool.h"
#include "design/continuation.h"
#include "design/finish.h"
#include "design/first_phase.h"
#include "design/local.h"
#include "design/margin.h"
#include "design/records.h"
#include "design/scaling.h"
#include "design/stabilise.h"
#include "design/starts.h"

/* Starts done before the stopping rule is asked again; fixed, so that the answer does not depend on the
 * number of threads. */
enum { BATCH = 8, ITERATIONS = 200, HOPELESS = 32 };
/* Best starts that are finished (finish.h) at most. */
enum { FINISHED = 4 };
/* J below this part of its natural size is zero within rounding. */
static const double NEGLIGIBLE = 1e-14;
struct shared {
    const struct fg_search_request *request;
    const struct fg_scaled *scaled;
    const double *today_theta;
    struct fg_record *records;
    int first; /* start index of the batch */
    atomic_bool stop, no_memory;
    atomic_int finished;        /* starts, whoever did them */
    flatgain_progress progress; /* touched by the calling thread only */
};

struct worker {
    struct shared *shared;
    bool calling_thread;
    struct fg_arena arena;
    struct fg_cost *cost;
    struct fg_local *local;
    struct fg_stabiliser *stabiliser;
    double *best; /* q, of the first phase */
};

static bool told_to_stop(void *user)
{
    struct worker *worker = user;
    struct shared *shared = worker->shared;
    const struct fg_search_request *request = shared->request;
    if (worker->calling_thread && request->progress && request->progress(&shared->progress, request->user))
        atomic_store(&shared->stop, true);
    return atomic_load(&shared->stop) || atomic_load(&shared->no_memory);
}

static struct fg_local_limits limits_of(struct worker *worker)
{
    const struct fg_bound *lqg = &worker->shared->request->benchmark->lqg;
    return (struct fg_local_limits){.iterations = ITERATIONS,
                                    .negligible = NEGLIGIBLE * fg_natural_cost(worker->shared->scaled),
                                    .bound = lqg->kind == FG_BOUND_NONE ? 0 : lqg->cost,
                                    .stop = told_to_stop,
                                    .user = worker};
}

static void one_start(void *context, int offset)
{
    struct worker *worker = context;
    struct shared *shared = worker->shared;
    const struct fg_scaled *scaled = shared->scaled;
    struct fg_record *record = &shared->records[shared->first + offset];
    struct fg_local_limits limits = limits_of(worker);
    if (told_to_stop(worker))
        return;
    if (fg_start(scaled, shared->today_theta, shared->request->seed, shared->first + offset, record->theta) !=
        FLATGAIN_OK) {
        atomic_store(&shared->no_memory, true);
        return;
    }
    record->evaluations = 1;
    record->stabilised = isfinite(fg_cost_at(worker->cost, record->theta));
    record->abscissa = fg_cost_abscissa(worker->cost);
    if (!record->stabilised) {
        bool shift_first = (shared->first + offset) / 2 % 2 == 0;
        if (fg_stabilise(worker->stabiliser, record->theta, 2 * scaled->margin, shift_first, &limits,
                         &record->abscissa, &record->evaluations))
            record->stabilised = isfinite(fg_cost_at(worker->cost, record->theta));
    }
    if (record->stabilised && scaled->pattern.count >= FG_FIRST_PHASE_FROM &&
        !fg_first_phase(worker->cost, &scaled->pattern, 10 * scaled->pattern.count, &limits, record->theta,
                        worker->best, &record->evaluations)) {
        atomic_store(&shared->no_memory, true);
        return;
    }
    if (record->stabilised) {
        record->local =
            fg_local_minimise(worker->local, worker->cost, &scaled->pattern, record->theta, &limits);
        record->evaluations += record->local.evaluations;
        fg_cost_at(worker->cost, record->theta);
        record->abscissa = fg_cost_abscissa(worker->cost);
    }
    record->done = true;
    int finished = atomic_fetch_add(&shared->finished, 1) + 1;
    if (worker->calling_thread) {
        shared->progress.starts_done = finished;
        if (record->stabilised)
            shared->progress.best = fmin(shared->progress.best, record->local.J);
    }
}

static void to_user_gain(const struct fg_scaled *scaled, const double *theta, double *K)
{
    fg_pattern_gain(&scaled->pattern, theta, K);
    fg_scaled_to_user(scaled, K, K);
}

static flatgain_status make_worker(struct worker *worker, struct shared *shared)
{
    const struct fg_scaled *scaled = shared->scaled;
    worker->shared = shared;
    worker->cost = fg_cost_new(&scaled->plant, &scaled->pattern, &worker->arena);
    worker->local = fg_local_new(scaled->pattern.count, &worker->arena);
    worker->stabiliser = fg_stabiliser_new(&scaled->plant, &scaled->pattern, &worker->arena);
    worker->best = fg_arena_doubles(&worker->arena, (size_t)scaled->pattern.count);
    if (worker->arena.failed || !worker->cost || !worker->local || !worker->stabiliser)
        return FLATGAIN_NO_MEMORY;
    return FLATGAIN_OK;
}

static void report(struct shared *shared, int count, struct fg_search_answer *answer,
                   const int *representative, const int *hits, struct fg_arena *arena)
{
    const struct fg_scaled *scaled = shared->scaled;
    const struct fg_record *records = shared->records;
    size_t entries = (size_t)scaled->plant.m * scaled->plant.p;
    answer->K = fg_arena_doubles(arena, entries);
    answer->minima = fg_arena_get(arena, (size_t)(answer->distinct + 1) * sizeof *answer->minima);
    if (arena->failed)
        return;
    for (int i = 0; i < count; i++) {
        answer->starts += records[i].done;
        answer->stabilised += records[i].done && records[i].stabilised;
        answer->evaluations += records[i].evaluations;
    }
    for (int k = 0; k < answer->distinct; k++) {
        answer->minima[k] = (struct fg_search_minimum){records[representative[k]].local.J, hits[k],
                                                       fg_arena_doubles(arena, entries)};
        if (arena->failed)
            return;
        to_user_gain(scaled, records[representative[k]].theta, answer->minima[k].K);
    }
    answer->cost = INFINITY;
    answer->residual = answer->smallest_curvature = answer->abscissa = NAN;
    answer->decay_margin = scaled->margin * scaled->rate;
    int best = fg_records_best(records, count);
    answer->end = best < 0 ? FG_SEARCH_NOT_FOUND : fg_records_end(records, count, best);
    if (best < 0)
        best = fg_records_least_unstable(records, count);
    if (best < 0)
        return;
    const struct fg_record *r = &records[best];
    to_user_gain(scaled, r->theta, answer->K);
    answer->abscissa = r->abscissa * scaled->rate;
    if (r->stabilised) {
        answer->cost = r->local.J;
        answer->zero = r->local.J <= NEGLIGIBLE * fg_natural_cost(scaled);
        if (answer->end != FG_SEARCH_BOUNDARY && answer->end != FG_SEARCH_UNBOUNDED) {
            answer->residual = r->local.residual; /* of a minimum; there is none otherwise */
            answer->smallest_curvature = r->local.smallest;
        }
        answer->at_bound = r->local.at_bound;
    }
}

static flatgain_status run(struct shared *shared, struct worker *workers, void **contexts, int threads,
                           int starts, struct fg_arena *arena, struct fg_search_answer *answer,
                           flatgain_error *error)
{
    int *representative = fg_arena_ints(arena, (size_t)starts), *hits = fg_arena_ints(arena, (size_t)starts);
    double negligible = NEGLIGIBLE * fg_natural_cost(shared->scaled);
    int converged = 0, count = 0;
    if (arena->failed)
        return fg_no_memory(error);
    workers[0].calling_thread = true;
    shared->progress = (flatgain_progress){0, starts, 0, INFINITY};
    while (count < starts && !atomic_load(&shared->stop)) {
        int batch = starts - count < BATCH ? starts - count : BATCH;
        shared->first = count;
        fg_pool_run(threads, contexts, batch, one_start);
        if (atomic_load(&shared->no_memory))
            return fg_no_memory(error);
        count += batch;
        answer->distinct =
            fg_records_distinct(shared->records, count, negligible, representative, hits, &converged);
        answer->expected_minima = fg_expected_minima(answer->distinct, converged);
        int best = fg_records_best(shared->records, count);
        shared->progress.starts_done = count;
        shared->progress.minima = answer->distinct;
        shared->progress.best = best < 0 ? INFINITY : shared->records[best].local.J;
        if (answer->distinct > 0 && answer->expected_minima < answer->distinct + 0.5) {
            answer->rule_satisfied = true;
            break;
        }
        if (answer->distinct == 0 && fg_records_stabilised(shared->records, count) >= HOPELESS)
            break; /* no minimum in sight: more starts would end like these; what is left goes to fg_finish */
    }
    struct fg_local_limits limits = limits_of(&workers[0]);
    for (int best, last = -1, tries = 0; tries < FINISHED && !atomic_load(&shared->stop);
         tries++, last = best) {
        best = fg_records_best(shared->records, count);
        if (best < 0 || best == last) /* the best start is finished */
            break;
        if (fg_finish(shared->scaled, workers[0].cost, workers[0].local, &limits, &shared->records[best]) !=
            FLATGAIN_OK)
            return fg_no_memory(error);
    }
    answer->distinct =
        fg_records_distinct(shared->records, count, negligible, representative, hits, &converged);
    answer->interrupted = atomic_load(&shared->stop);
    report(shared, count, answer, representative, hits, arena);
    return arena->failed ? fg_no_memory(error) : FLATGAIN_OK;
}

/* The benchmark's LQR gain belongs to the plant without sensor lags: pad it with zero columns. */
static void pad_gain(const struct fg_search_request *request, struct fg_benchmark *benchmark,
                     struct fg_arena *arena)
{
    int n = request->plant->n, m = request->plant->m;
    *benchmark = *request->benchmark;
    if (!benchmark->has_lqr_gain || benchmark->L.cols == n)
        return;
    struct fg_matrix L = fg_matrix_new(arena, m, n);
    if (L.at)
        memcpy(L.at, benchmark->L.at, (size_t)m * benchmark->L.cols * sizeof(double));
    benchmark->L = L;
}

flatgain_status fg_search_as_given(const struct fg_search_request *request, struct fg_arena *arena,
                                   struct fg_search_answer *answer, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct fg_scaled scaled;
    struct fg_benchmark benchmark;
    int threads = request->threads > 0 ? request->threads : fg_pool_processors();
    int q = request->pattern->count, starts = q > 0 ? request->starts : 1;
    if (threads > BATCH)
        threads = BATCH;
    *answer = (struct fg_search_answer){.end = FG_SEARCH_NOT_FOUND};
    pad_gain(request, &benchmark, &scratch);
    flatgain_status status = scratch.failed ? fg_no_memory(error) : FLATGAIN_OK;
    if (status == FLATGAIN_OK)
        status = fg_scale(request->plant, request->pattern, &benchmark, &scratch, &scaled, error);
    if (status != FLATGAIN_OK) {
        fg_arena_release(&scratch);
        return status;
    }
    struct shared shared = {.request = request, .scaled = &scaled};
    struct worker *workers = fg_arena_get(&scratch, (size_t)threads * sizeof *workers);
    void **contexts = fg_arena_get(&scratch, (size_t)threads * sizeof *contexts);
    double *thetas = fg_arena_doubles(&scratch, ((size_t)starts + 1) * (size_t)(q > 0 ? q : 1));
    shared.records = fg_arena_get(&scratch, (size_t)starts * sizeof *shared.records);
    double *today = fg_arena_doubles(&scratch, (size_t)request->plant->m * request->plant->p);
    if (scratch.failed) {
        fg_arena_release(&scratch);
        return fg_no_memory(error);
    }
    for (int i = 0; i < starts; i++) {
        shared.records[i].theta = thetas + (size_t)i * q;
        shared.records[i].abscissa = NAN;
    }
    if (request->today) {
        fg_scaled_from_user(&scaled, request->today->at, today);
        fg_pattern_parameters(&scaled.pattern, today, thetas + (size_t)starts * q);
        shared.today_theta = thetas + (size_t)starts * q;
    }
    for (int i = 0; i < threads && status == FLATGAIN_OK; i++) {
        contexts[i] = &workers[i];
        if (make_worker(&workers[i], &shared) != FLATGAIN_OK)
            status = fg_no_memory(error);
    }
    if (status == FLATGAIN_OK)
        status = fg_settle_margin(request->plant, request->pattern, &scaled, workers[0].cost,
                                  shared.today_theta, thetas, error);
    for (int i = 0; i < threads && status == FLATGAIN_OK; i++)
        fg_cost_margin(workers[i].cost, scaled.margin);
    if (status == FLATGAIN_OK)
        status = run(&shared, workers, contexts, threads, starts, arena, answer, error);
    for (int i = 0; i < threads; i++)
        fg_arena_release(&workers[i].arena);
    fg_arena_release(&scratch);
    return status;
}
