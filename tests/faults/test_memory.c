/* Every allocation of the library fails in turn: the call says "no memory", gives nothing, keeps nothing,
 * and works when it is made again. The contract is that of flatgain.h; see allocations.h for the source. */
#include <cjson/cJSON.h>
#include <check.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "allocations.h"
#include "design/first_phase.h"
#include "flatgain.h"

/* Everything a problem file can have, made up: files, blocks, lists, lags, ties, bounds, warnings. */
static const char CONTINUOUS[] = "title: Two coupled tanks and a wall\n"
                                 "setting: continuous\n"
                                 "time: {unit: min}\n"
                                 "plant:\n"
                                 "  A: {file: a.csv}\n"
                                 "  B: |\n"
                                 "    0.5 0     # pump\n"
                                 "    0   0.4\n"
                                 "    0.1 0.3\n"
                                 "  C: [[1, 0, 0.2], [0, 1, 0.5]]\n"
                                 "  D: |\n"
                                 "    0 0.01\n"
                                 "    0.02 0\n"
                                 "disturbance:\n"
                                 "  - {G: [[0.3], [0.1], [0]], intensity: 0.5}\n"
                                 "  - W: |\n"
                                 "      0.1 0.00001 0\n"
                                 "      0   0.2 0\n"
                                 "      0   0   0.1\n"
                                 "noise:\n"
                                 "  V: [[0.02, 0], [0, 0.01]]\n"
                                 "weights:\n"
                                 "  Q: {file: q.mtx}\n"
                                 "  R: [[1, 0], [0, 2]]\n"
                                 "  N: [[0.1, 0], [0, 0.1], [0, 0]]\n"
                                 "signals:\n"
                                 "  states: [tank 1, tank 2, wall]\n"
                                 "  inputs: [pump, heater]\n"
                                 "  outputs:\n"
                                 "    - {name: level, unit: cm, lag: 0.2}\n"
                                 "    - {name: temperature, unit: K, lag: 0.5, filter: plc}\n"
                                 "gain:\n"
                                 "  pattern: |\n"
                                 "    k -k\n"
                                 "    0 free\n"
                                 "  lower: none\n"
                                 "  upper: |\n"
                                 "    20 none\n"
                                 "    none 20\n"
                                 "  today: |\n"
                                 "    1 0\n"
                                 "    0 2\n"
                                 "accept: 10\n";
static const char DISCRETE[] = "{\"setting\": \"discrete\","
                               " \"plant\": {\"A\": [[1.1, 0.2], [0, 0.7]], \"B\": [[1], [0.5]],"
                               "             \"C\": [[1, 0], [0.3, 1]], \"D\": [[0.1], [0]]},"
                               " \"disturbance\": {\"W\": [[1, 0.2], [0.2, 0.5]]},"
                               " \"noise\": {\"V\": [[0.1, 0], [0, 0]]},"
                               " \"weights\": {\"Q\": [[1, 0], [0, 1]], \"R\": 0.5},"
                               " \"gain\": {\"pattern\": \"free 0.1\", \"lower\": -5, \"upper\": 5}}";
static const char FOLDER[] = "tests/faults/data";

/* What the jobs work on; made without failures. */
static flatgain_problem *problem;
static flatgain_result *made;
static int threads = 1;

static flatgain_problem *parsed(const char *text)
{
    flatgain_problem *out = NULL;
    flatgain_error error = {0};
    flatgain_status status = flatgain_problem_parse(text, strlen(text), "made up", FOLDER, &out, &error);
    ck_assert_msg(status == FLATGAIN_OK, "%s", error.text);
    return out;
}

/* So many gains that the search begins with NLopt. */
static flatgain_problem *many_gains(void)
{
    enum { N = 3, M = 9 };
    static const double A[] = {0.9, 0.1, 0, 0, 0.8, 0.1, 0, 0, 1.02}, Q[] = {1, 0, 0, 0, 1, 0, 0, 0, 1};
    double B[N * M], C[M * N], R[M * M] = {0};
    for (int i = 0; i < N * M; i++) {
        B[i] = sin(1 + i);
        C[i] = cos(2 * i);
    }
    for (int i = 0; i < M; i++)
        R[i * M + i] = 1 + i;
    const flatgain_matrices matrices = {.discrete = 1,
                                        .states = N,
                                        .inputs = M,
                                        .outputs = M,
                                        .A = A,
                                        .B = B,
                                        .C = C,
                                        .Q = Q,
                                        .R = R,
                                        .W = Q,
                                        .accept_percent = NAN};
    flatgain_problem *out = NULL;
    ck_assert_int_ge(M * M, FG_FIRST_PHASE_FROM);
    ck_assert_int_eq(flatgain_problem_from_matrices(&matrices, &out, NULL), FLATGAIN_OK);
    return out;
}

/* ---- the harness ------------------------------------------------------------------------------ */

typedef flatgain_status (*job)(flatgain_error *error);

static void check_error(flatgain_status status, const flatgain_error *error, long n)
{
    ck_assert_msg(status == FLATGAIN_NO_MEMORY, "allocation %ld refused: status \"%s\", text \"%s\"", n,
                  flatgain_status_name(status), error->text);
    ck_assert_int_eq(error->status, FLATGAIN_NO_MEMORY);
    ck_assert_str_eq(error->text, "out of memory");
}

static void works(job work, long alive)
{
    flatgain_error error = {0};
    ck_assert_msg(work(&error) == FLATGAIN_OK, "%s", error.text);
    ck_assert_int_eq(allocations_alive(), alive);
}

/* Runs the job with its n-th allocation refused, n = 0, step, 2 step, ... until nothing was refused; with
 * `all_later` every allocation after the n-th is refused, too. */
static void every_allocation(job work, long step, bool all_later)
{
    long alive = allocations_alive(), tried = 0;
    for (long n = 0;; n += step) {
        flatgain_error error = {0};
        allocations_fail(n, all_later);
        flatgain_status status = work(&error);
        long refused = allocations_end();
        ck_assert_msg(allocations_alive() == alive, "allocation %ld refused: %ld pieces lost", n,
                      allocations_alive() - alive);
        if (refused == 0)
            break;
        check_error(status, &error, n);
        tried++;
    }
    ck_assert_int_gt(tried, 0); /* a job that allocates nothing would test nothing */
    works(work, alive);
}

/* About `count` places of refusal, each alone and with all that follow. */
static void survives(job work, long count)
{
    allocations_fail(-1, false);
    works(work, allocations_alive());
    allocations_end();
    long step = 1 + allocations_seen() / count;
    every_allocation(work, step, false);
    every_allocation(work, step, true);
}

/* ---- the jobs --------------------------------------------------------------------------------- */

static flatgain_status end_problem(flatgain_status status, flatgain_problem *out)
{
    ck_assert((out != NULL) == (status == FLATGAIN_OK));
    flatgain_problem_free(out);
    return status;
}

static flatgain_status end_result(flatgain_status status, flatgain_result *out)
{
    ck_assert((out != NULL) == (status == FLATGAIN_OK));
    flatgain_result_free(out);
    return status;
}

static flatgain_status end_text(flatgain_status status, char *out, flatgain_error *error)
{
    ck_assert((out != NULL) == (status == FLATGAIN_OK));
    flatgain_text_free(out);
    if (status == FLATGAIN_NO_MEMORY) { /* these calls have no error text */
        error->status = status;
        strcpy(error->text, "out of memory");
    }
    return status;
}

static void *somewhere = &somewhere; /* what a failed call must overwrite with NULL */

static flatgain_status parse_continuous(flatgain_error *error)
{
    flatgain_problem *out = somewhere;
    flatgain_status status =
        flatgain_problem_parse(CONTINUOUS, sizeof CONTINUOUS - 1, "made up", FOLDER, &out, error);
    return end_problem(status, out);
}

static flatgain_status parse_discrete(flatgain_error *error)
{
    flatgain_problem *out = somewhere;
    flatgain_status status = flatgain_problem_parse(DISCRETE, sizeof DISCRETE - 1, NULL, NULL, &out, error);
    return end_problem(status, out);
}

static flatgain_status read_file(flatgain_error *error)
{
    flatgain_problem *out = somewhere;
    flatgain_status status = flatgain_problem_read("tests/faults/data/tanks.yaml", &out, error);
    return end_problem(status, out);
}

static flatgain_status from_matrices(flatgain_error *error)
{
    static const double A[] = {-1, 0.5, 0.2, -0.4}, B[] = {1, 0, 0.1, 0.7}, C[] = {1, 0}, D[] = {0, 0.1};
    static const double Q[] = {1, 1e-6, 0, 2}, R[] = {1, 0, 0, 1}, N[] = {0.1, 0, 0, 0.1}, W[] = {1, 0, 0, 1};
    static const double V[] = {0.1}, lag[] = {0.3}, fixed[] = {NAN, 0.5}, lower[] = {-1, -1},
                        upper[] = {9, 9};
    static const double today[] = {0.2, 0.1};
    const flatgain_matrices matrices = {0, 0, 2, 2, 1,   A,     B,     C,     D,     Q,
                                        R, N, W, V, lag, fixed, lower, upper, today, 5};
    flatgain_problem *out = somewhere;
    flatgain_status status = flatgain_problem_from_matrices(&matrices, &out, error);
    return end_problem(status, out);
}

static flatgain_status read_gain(const char *path, flatgain_error *error)
{
    double gain[4] = {7, 7, 7, 7};
    flatgain_status status = flatgain_gain_read(path, problem, gain, error);
    ck_assert_double_eq(gain[0], status == FLATGAIN_OK ? 0.4 : 7); /* untouched by a failure */
    return status;
}

static flatgain_status read_gain_rows(flatgain_error *error)
{
    return read_gain("tests/faults/data/gain.csv", error);
}

static flatgain_status read_gain_result(flatgain_error *error)
{
    return read_gain("tests/faults/data/gain.json", error);
}

static flatgain_status tune(flatgain_error *error)
{
    flatgain_result *out = somewhere;
    flatgain_options options = flatgain_options_default();
    options.starts = 8;
    options.threads = threads;
    flatgain_status status = flatgain_tune(problem, &options, &out, error);
    return end_result(status, out);
}

static flatgain_status judge(flatgain_error *error)
{
    static const double gain[] = {0.4, 0.1, 0, 0.4};
    flatgain_result *out = somewhere;
    flatgain_status status = flatgain_judge(problem, gain, NULL, &out, error);
    return end_result(status, out);
}

static flatgain_status inspect(flatgain_error *error)
{
    flatgain_result *out = somewhere;
    flatgain_status status = flatgain_inspect(problem, NULL, &out, error);
    return end_result(status, out);
}

static flatgain_status write_text(flatgain_error *error)
{
    const flatgain_style style = {.color = 1, .verbose = 1, .timing = 1};
    char *out = somewhere;
    size_t length;
    flatgain_status status = flatgain_result_text(made, &style, &out, &length);
    return end_text(status, out, error);
}

static flatgain_status write_json(flatgain_error *error)
{
    char *out = somewhere;
    flatgain_status status = flatgain_result_json(made, NULL, &out, NULL);
    return end_text(status, out, error);
}

/* ---- the tests -------------------------------------------------------------------------------- */

static void need_result(void)
{
    flatgain_options options = flatgain_options_default();
    flatgain_error error = {0};
    options.starts = 8;
    options.threads = 1;
    ck_assert_msg(flatgain_tune(problem, &options, &made, &error) == FLATGAIN_OK, "%s", error.text);
    ck_assert_int_eq(flatgain_result_outcome(made), FLATGAIN_TUNED);
}

static void clean_up(void)
{
    flatgain_result_free(made);
    flatgain_problem_free(problem);
    made = NULL;
    problem = NULL;
    ck_assert_int_eq(allocations_alive(), 0);
}

START_TEST(reading)
{
    survives(parse_continuous, 1000);
    survives(parse_discrete, 1000);
    survives(read_file, 1000);
    survives(from_matrices, 1000);
    problem = parsed(CONTINUOUS);
    survives(read_gain_rows, 1000);
    survives(read_gain_result, 1000);
    clean_up();
}
END_TEST

START_TEST(tuning)
{
    threads = _i / 2 + 1;
    problem = parsed(_i % 2 ? DISCRETE : CONTINUOUS);
    survives(tune, 300);
    clean_up();
}
END_TEST

START_TEST(judging_and_inspecting)
{
    problem = parsed(_i ? DISCRETE : CONTINUOUS);
    survives(judge, 1000);
    survives(inspect, 1000);
    clean_up();
}
END_TEST

START_TEST(writing)
{
    problem = parsed(_i ? DISCRETE : CONTINUOUS);
    need_result();
    survives(write_text, 1000);
    survives(write_json, 1000);
    /* now the memory of the JSON library as well */
    cJSON_InitHooks(&(cJSON_Hooks){refusing_malloc, refusing_free});
    survives(write_json, 300);
    cJSON_InitHooks(NULL);
    clean_up();
}
END_TEST

START_TEST(tuning_many_gains)
{
    problem = many_gains();
    survives(tune, 20);
    clean_up();
}
END_TEST

/* A result that ends early (interrupted, impossible) takes other ways. */
static int stop_at_once(const flatgain_progress *progress, void *user)
{
    (void)progress;
    (void)user;
    return 1;
}

static flatgain_status tune_interrupted(flatgain_error *error)
{
    flatgain_result *out = somewhere;
    flatgain_options options = flatgain_options_default();
    options.threads = 1;
    options.progress = stop_at_once;
    flatgain_status status = flatgain_tune(problem, &options, &out, error);
    if (status == FLATGAIN_OK)
        ck_assert_int_eq(flatgain_result_outcome(out), FLATGAIN_INTERRUPTED);
    return end_result(status, out);
}

static flatgain_status tune_impossible(flatgain_error *error)
{
    flatgain_result *out = somewhere;
    flatgain_status status = flatgain_tune(problem, NULL, &out, error);
    if (status == FLATGAIN_OK)
        ck_assert_int_eq(flatgain_result_outcome(out), FLATGAIN_IMPOSSIBLE);
    return end_result(status, out);
}

START_TEST(early_ends)
{
    static const char UNMOVABLE[] = "{setting: continuous, plant: {A: [[1, 0], [0, -1]], B: [[0], [1]],"
                                    " C: [[1, 1]]}, disturbance: {W: [[1, 0], [0, 1]]},"
                                    " weights: {Q: [[1, 0], [0, 1]], R: 1}}";
    problem = parsed(CONTINUOUS);
    survives(tune_interrupted, 100);
    flatgain_problem_free(problem);
    problem = parsed(UNMOVABLE);
    survives(tune_impossible, 100);
    clean_up();
}
END_TEST

/* Threads that cannot be started: fewer workers, the same answer. */
START_TEST(no_threads)
{
    char *text[2];
    problem = parsed(CONTINUOUS);
    for (int fail = 0; fail < 2; fail++) {
        flatgain_options options = flatgain_options_default();
        flatgain_result *out;
        options.starts = 16;
        options.threads = 2;
        threads_fail(fail);
        ck_assert_int_eq(flatgain_tune(problem, &options, &out, NULL), FLATGAIN_OK);
        threads_fail(false);
        ck_assert_int_eq(flatgain_result_json(out, NULL, &text[fail], NULL), FLATGAIN_OK);
        flatgain_result_free(out);
    }
    ck_assert_str_eq(text[0], text[1]);
    flatgain_text_free(text[0]);
    flatgain_text_free(text[1]);
    clean_up();
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("memory");
    TCase *tests = tcase_create("memory");
    tcase_set_timeout(tests, 120);
    tcase_add_test(tests, reading);
    tcase_add_loop_test(tests, tuning, 0, 4);
    tcase_add_test(tests, tuning_many_gains);
    tcase_add_loop_test(tests, judging_and_inspecting, 0, 2);
    tcase_add_loop_test(tests, writing, 0, 2);
    tcase_add_test(tests, early_ends);
    tcase_add_test(tests, no_threads);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
