/* Several threads read, tune, judge, inspect and write at once: each with problems of its own, and all with
 * one shared problem. The answers are, byte for byte, those of one thread alone. Run under the thread
 * sanitizer by tests/run_sanitizers.sh. Contract: flatgain.h, "different threads may use different handles".
 */
#include <check.h>
#include <pthread.h>
#include <stdatomic.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "flatgain.h"

enum { THREADS = 6, ROUNDS = 3, JOBS = 8 };

/* Made up; entry (0, 0) of A differs from job to job, so that no two problems are the same. */
static const char PROBLEM[] =
    "{setting: %s, plant: {A: [[%.17g, 0.2, 0], [0.1, 0.4, 0.3], [0, -0.2, 0.5]],"
    " B: [[1, 0], [0, 1], [0.5, 0.2]], C: [[1, 0, 0], [0, 0, 1]], D: [[0, 0.1], [0, 0]]},"
    " disturbance: {W: [[1, 0, 0], [0, 1, 0], [0, 0, 1]]},"
    " weights: {Q: [[1, 0, 0], [0, 1, 0], [0, 0, 1]], R: [[1, 0], [0, 2]]},"
    " gain: {pattern: [[free, 0], [0, free]], lower: -9, today: [[1, 0], [0, 1]]}, accept: 5}";

static flatgain_problem *read_problem(int job)
{
    char text[1000];
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    bool discrete = job % 2;
    snprintf(text, sizeof text, PROBLEM, discrete ? "discrete" : "continuous",
             (discrete ? 1.05 : 0.1) + 0.01 * job);
    if (flatgain_problem_parse(text, strlen(text), "made up", NULL, &problem, &error) != FLATGAIN_OK)
        fprintf(stderr, "%s\n", error.text);
    return problem;
}

static int on_progress(const flatgain_progress *progress, void *user)
{
    int *calls = user;
    *calls += progress->starts_max > 0;
    return 0;
}

/* All there is to say about a problem: the JSON of tuning, judging and inspecting. NULL when a call failed.
 */
static char *say_all(const flatgain_problem *problem, int inner_threads)
{
    static const double gain[] = {0.9, 0, 0, 0.4};
    flatgain_options options = flatgain_options_default();
    flatgain_result *results[3] = {NULL, NULL, NULL};
    int calls = 0;
    options.starts = 16;
    options.threads = inner_threads;
    options.progress = on_progress;
    options.user = &calls;
    bool good = flatgain_tune(problem, &options, &results[0], NULL) == FLATGAIN_OK &&
                flatgain_judge(problem, gain, NULL, &results[1], NULL) == FLATGAIN_OK &&
                flatgain_inspect(problem, NULL, &results[2], NULL) == FLATGAIN_OK && calls > 0;
    char *all = calloc(1, 1);
    for (int k = 0; k < 3; k++) {
        char *text = NULL;
        size_t length = 0;
        good = good && flatgain_result_json(results[k], NULL, &text, &length) == FLATGAIN_OK;
        if (good && (all = realloc(all, strlen(all) + length + 1)))
            strcat(all, text);
        flatgain_text_free(text);
        flatgain_result_free(results[k]);
    }
    if (good)
        return all;
    free(all);
    return NULL;
}

struct thread {
    pthread_t id;
    int number;
    const flatgain_problem *shared;
    const char *const *alone; /* JOBS + 1: the answers of one thread, the last for the shared problem */
    atomic_int *good;
};

static void *work(void *argument)
{
    struct thread *thread = argument;
    for (int round = 0; round < ROUNDS; round++) {
        int job = (thread->number + round) % JOBS;
        flatgain_problem *own = read_problem(job);
        char *mine = say_all(own, 1 + round % 2), *common = say_all(thread->shared, 2 - round % 2);
        if (mine && common && strcmp(mine, thread->alone[job]) == 0 &&
            strcmp(common, thread->alone[JOBS]) == 0)
            atomic_fetch_add(thread->good, 1);
        free(mine);
        free(common);
        flatgain_problem_free(own);
    }
    return NULL;
}

START_TEST(together_as_alone)
{
    char *alone[JOBS + 1];
    struct thread threads[THREADS];
    atomic_int good;
    atomic_init(&good, 0);
    flatgain_problem *shared = read_problem(100);
    for (int job = 0; job <= JOBS; job++) {
        flatgain_problem *problem = job < JOBS ? read_problem(job) : shared;
        alone[job] = say_all(problem, 1);
        ck_assert_ptr_nonnull(alone[job]);
        ck_assert(job == 0 || strcmp(alone[job], alone[job - 1]) != 0);
        if (job < JOBS)
            flatgain_problem_free(problem);
    }
    for (int k = 0; k < THREADS; k++) {
        threads[k] = (struct thread){
            .number = k, .shared = shared, .alone = (const char *const *)alone, .good = &good};
        ck_assert_int_eq(pthread_create(&threads[k].id, NULL, work, &threads[k]), 0);
    }
    for (int k = 0; k < THREADS; k++)
        pthread_join(threads[k].id, NULL);
    ck_assert_int_eq(atomic_load(&good), THREADS * ROUNDS);
    for (int job = 0; job <= JOBS; job++)
        free(alone[job]);
    flatgain_problem_free(shared);
}
END_TEST

/* Results made, written and freed in different threads; the last one to go frees the problem. */
static void *write_and_free(void *argument)
{
    flatgain_result *result = argument;
    char *text = NULL;
    if (flatgain_result_text(result, NULL, &text, NULL) != FLATGAIN_OK)
        return NULL;
    flatgain_text_free(text);
    flatgain_result_free(result);
    return argument;
}

START_TEST(handed_over)
{
    flatgain_problem *problem = read_problem(1);
    pthread_t threads[THREADS];
    for (int k = 0; k < THREADS; k++) {
        flatgain_result *result = NULL;
        ck_assert_int_eq(flatgain_inspect(problem, NULL, &result, NULL), FLATGAIN_OK);
        ck_assert_int_eq(pthread_create(&threads[k], NULL, write_and_free, result), 0);
    }
    flatgain_problem_free(problem);
    for (int k = 0; k < THREADS; k++) {
        void *returned;
        pthread_join(threads[k], &returned);
        ck_assert_ptr_nonnull(returned);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("threads");
    TCase *tests = tcase_create("threads");
    tcase_set_timeout(tests, 300);
    tcase_add_test(tests, together_as_alone);
    tcase_add_test(tests, handed_over);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
