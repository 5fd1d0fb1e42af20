/* The problem reader from outside: files that are right in every form, files that are wrong in every
 * way (tests/reader/NAME.yaml with the expected words in NAME.expected), and files made to hurt.
 * The source of every expectation is docs/problem-file.md. Run from the root of the repository. */
#include <check.h>
#include <dirent.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

#include "base/text.h"
#include "problem/gain_read.h"
#include "problem/problem.h"

static flatgain_problem *parse(const char *text, flatgain_error *error)
{
    flatgain_problem *problem = NULL;
    flatgain_status status = flatgain_problem_parse(text, strlen(text), "f", NULL, &problem, error);
    ck_assert_int_eq(status == FLATGAIN_OK, problem != NULL);
    return problem;
}

static flatgain_problem *must_parse(const char *text)
{
    flatgain_error error = {0};
    flatgain_problem *problem = parse(text, &error);
    ck_assert_msg(problem != NULL, "%s", error.text);
    return problem;
}

/* ---- one problem in every form ------------------------------------------------------------------ */

static const char BLOCKS[] = "setting: discrete\n"
                             "plant:\n"
                             "  A: |\n"
                             "    0.5 0.25\n"
                             "    -1e-1 0.75\n"
                             "  B: |\n"
                             "    1\n"
                             "    .5\n"
                             "  C: 1 0\n"
                             "  D: 0.125\n"
                             "disturbance:\n"
                             "  W: |\n"
                             "    2 1\n"
                             "    1 2\n"
                             "noise: {V: 0.25}\n"
                             "weights:\n"
                             "  Q: |\n"
                             "    1 0\n"
                             "    0 3\n"
                             "  R: 2\n"
                             "  N: |\n"
                             "    0.5\n"
                             "    0\n"
                             "gain: {lower: -3, upper: 4, today: 0.5}\n"
                             "accept: 10\n";

static const char JSON[] =
    "{\"setting\": \"discrete\", \"plant\": {\"A\": [[0.5, 0.25], [-0.1, 0.75]], \"B\": \"1\\n+5E-1\","
    "\"C\": [1, 0], \"D\": [[0.125]]},\"disturbance\":[{\"W\": [[1,1],[1,1]]},{\"G\":[[1,0],[0,2]],"
    "\"intensity\":[[1,0],[0,0.25]]}],\"noise\":{\"V\":0.25},\"weights\":{\"Q\":[[1,0],[0,3]],\"R\":2.0,"
    "\"N\":[[0.5],[0]]},\"gain\":{\"pattern\":[[\"free\"]],\"lower\":[[-3]],\"upper\":4,\"today\":[[0.5]]},"
    "\"accept\":1e1}";

static void same(const flatgain_problem *a, const flatgain_problem *b)
{
    const struct fg_matrix of_a[] = {a->A, a->B, a->C, a->D, a->W, a->V, a->Q, a->R, a->N, a->today};
    const struct fg_matrix of_b[] = {b->A, b->B, b->C, b->D, b->W, b->V, b->Q, b->R, b->N, b->today};
    ck_assert_int_eq(a->n, b->n);
    ck_assert_int_eq(a->m, b->m);
    ck_assert_int_eq(a->p, b->p);
    for (size_t k = 0; k < sizeof of_a / sizeof *of_a; k++) {
        ck_assert_int_eq(of_a[k].rows, of_b[k].rows);
        ck_assert_int_eq(of_a[k].cols, of_b[k].cols);
        for (int e = 0; e < of_a[k].rows * of_a[k].cols; e++)
            ck_assert_msg(of_a[k].at[e] == of_b[k].at[e], "matrix %zu entry %d", k, e);
    }
    ck_assert_int_eq(a->pattern.count, b->pattern.count);
    ck_assert(a->pattern.lower[0] == b->pattern.lower[0] && a->pattern.upper[0] == b->pattern.upper[0]);
    ck_assert(a->accept_percent == b->accept_percent);
    ck_assert(a->hash == b->hash);
}

/* Blocks, JSON and matrices in memory are the same problem, bit for bit, with the same hash. */
START_TEST(every_form_is_the_same_problem)
{
    const double A[] = {0.5, 0.25, -0.1, 0.75}, B[] = {1, 0.5}, C[] = {1, 0}, D[] = {0.125},
                 W[] = {2, 1, 1, 2}, V[] = {0.25}, Q[] = {1, 0, 0, 3}, R[] = {2}, N[] = {0.5, -0.0},
                 low[] = {-3}, high[] = {4}, today[] = {0.5};
    const flatgain_matrices matrices = {.discrete = 1,
                                        .states = 2,
                                        .inputs = 1,
                                        .outputs = 1,
                                        .A = A,
                                        .B = B,
                                        .C = C,
                                        .D = D,
                                        .Q = Q,
                                        .R = R,
                                        .N = N,
                                        .W = W,
                                        .V = V,
                                        .lower = low,
                                        .upper = high,
                                        .today = today,
                                        .accept_percent = 10};
    flatgain_error error = {0};
    flatgain_problem *made = NULL, *blocks = must_parse(BLOCKS), *json = must_parse(JSON);
    ck_assert_int_eq(flatgain_problem_from_matrices(&matrices, &made, &error), FLATGAIN_OK);
    same(blocks, made);
    same(blocks, json);
    ck_assert(blocks->warnings == NULL);
    ck_assert_str_eq(blocks->time_unit, "step");
    ck_assert_str_eq(blocks->outputs[0].name, "y1");
    ck_assert_int_eq(flatgain_problem_inputs(made), 1);
    ck_assert_int_eq(flatgain_problem_outputs(made), 1);
    ck_assert_int_eq(flatgain_problem_states(made), 2);
    ck_assert_str_eq(flatgain_problem_title(made), "");
    ck_assert(flatgain_problem_today(made)[0] == 0.5);
    flatgain_problem_free(made);
    flatgain_problem_free(blocks);
    flatgain_problem_free(json);
}
END_TEST

static const char SIGNALS[] = "title: 'Dryer: two zones'\n"
                              "setting: continuous\n"
                              "time: {unit: min}\n"
                              "plant: {A: [[-1, 0], [0, -2]], B: [[1, 0], [0, 1]], C: [[1, 0], [0, 1]]}\n"
                              "start: {X0: [[1, 0], [0, 1]]}\n"
                              "weights: {Q: [[1, 0], [0, 1]], R: [[1, 0], [0, 1]]}\n"
                              "gain:\n"
                              "  pattern: |\n"
                              "    k    2\n"
                              "    -k   free\n"
                              "  lower: |\n"
                              "    -1   none\n"
                              "    -3   0\n"
                              "  upper: |\n"
                              "    5    none\n"
                              "    0.5  none\n"
                              "signals:\n"
                              "  inputs: [heater, no]\n"
                              "  outputs:\n"
                              "    - {name: moisture, unit: '%', lag: 0.25, filter: plc}\n"
                              "    - {unit: C}\n";

START_TEST(names_ties_and_bounds)
{
    flatgain_problem *problem = must_parse(SIGNALS);
    const struct fg_pattern *pattern = &problem->pattern;
    ck_assert_str_eq(problem->title, "Dryer: two zones");
    ck_assert_str_eq(problem->time_unit, "min");
    ck_assert_int_eq(problem->reading, FG_START);
    ck_assert_str_eq(problem->inputs[1].name, "no"); /* not a boolean */
    ck_assert(problem->named_inputs && problem->named_outputs && !problem->named_states);
    ck_assert_str_eq(problem->outputs[0].unit, "%");
    ck_assert_str_eq(problem->outputs[1].name, "y2");
    ck_assert(problem->outputs[0].lag == 0.25 && problem->outputs[0].lag_in_plc);
    ck_assert(problem->outputs[1].lag == 0 && !problem->outputs[1].lag_in_plc);
    /* k within [-1, 5], and -k within [-3, 0.5]: k within [-0.5, 3] */
    ck_assert_int_eq(pattern->count, 2);
    ck_assert(pattern->lower[0] == -0.5 && pattern->upper[0] == 3);
    ck_assert(pattern->lower[1] == 0 && pattern->upper[1] == INFINITY);
    const double theta[] = {0.75, 9};
    double K[4], back[2];
    fg_pattern_gain(pattern, theta, K); /* by columns: k, -k, 2, free */
    ck_assert(K[0] == 0.75 && K[1] == -0.75 && K[2] == 2 && K[3] == 9);
    fg_pattern_parameters(pattern, (double[]){1, -2, 7, -4}, back);
    ck_assert(back[0] == 1.5 && back[1] == 0); /* mean of 1 and 2; clipped to 0 */
    flatgain_problem_free(problem);
}
END_TEST

/* Numbers do not follow the locale, octal and hexadecimal are not guessed. */
START_TEST(numbers_are_decimal)
{
    flatgain_problem *problem =
        must_parse("setting: discrete\nplant: {A: 0.5, B: 010, C: +1.}\n"
                   "disturbance: {W: 1e-999}\nnoise: {V: 1}\nweights: {Q: 1, R: 1}\n");
    ck_assert(problem->B.at[0] == 10 && problem->C.at[0] == 1 && problem->W.at[0] == 0);
    ck_assert_str_eq(problem->warnings->code, "no-disturbance");
    flatgain_problem_free(problem);
}
END_TEST

/* A reference that is held keeps the problem. */
START_TEST(references_are_counted)
{
    flatgain_problem *problem = must_parse(BLOCKS), *held = fg_problem_retain(problem);
    flatgain_problem_free(problem);
    ck_assert(held->A.at[0] == 0.5);
    flatgain_problem_free(held);
    flatgain_problem_free(NULL);
}
END_TEST

/* ---- data files --------------------------------------------------------------------------------- */

static int is_yaml(const struct dirent *entry)
{
    size_t length = strlen(entry->d_name);
    return length > 5 && strcmp(entry->d_name + length - 5, ".yaml") == 0;
}

static void add_outcome(struct fg_text *text, const char *path)
{
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    flatgain_status status = flatgain_problem_read(path, &problem, &error);
    fg_text_format(text, "%s\n", flatgain_status_name(status));
    if (status != FLATGAIN_OK)
        fg_text_format(text, "%s\n", error.text);
    for (const struct fg_problem_warning *w = problem ? problem->warnings : NULL; w; w = w->next)
        fg_text_format(text, "%s: %s\n", w->code, w->text);
    flatgain_problem_free(problem);
}

static char *slurp(const char *path)
{
    FILE *file = fopen(path, "rb");
    char *text = calloc(1, 1 << 20);
    if (!file || !text) {
        free(text);
        return NULL;
    }
    ck_assert(fread(text, 1, (1 << 20) - 1, file) < (1 << 20) - 1);
    fclose(file);
    return text;
}

START_TEST(every_data_file_says_what_is_expected)
{
    struct dirent **found;
    int count = scandir("tests/reader", &found, is_yaml, alphasort);
    ck_assert_int_gt(count, 100);
    for (int i = 0; i < count; i++) {
        char path[600], expected[700];
        struct fg_text text = {0};
        snprintf(path, sizeof path, "tests/reader/%s", found[i]->d_name);
        snprintf(expected, sizeof expected, "%.*s.expected", (int)strlen(path) - 5, path);
        add_outcome(&text, path);
        char *words = slurp(expected);
        ck_assert_msg(words != NULL, "no %s", expected);
        ck_assert_msg(strcmp(words, text.at) == 0, "%s:\nfound    %sexpected %s", path, text.at, words);
        free(words);
        fg_text_free(&text);
        free(found[i]);
    }
    free(found);
}
END_TEST

/* Every ```yaml block of the manual is a problem that can be read without a warning. */
START_TEST(examples_of_the_manual_are_right)
{
    char *manual = slurp("docs/problem-file.md");
    ck_assert_ptr_nonnull(manual);
    int count = 0;
    for (char *at = strstr(manual, "```yaml\n"); at; at = strstr(at, "```yaml\n"), count++) {
        at += 8;
        char *end = strstr(at, "```");
        ck_assert_ptr_nonnull(end);
        flatgain_problem *problem = NULL;
        flatgain_error error = {0};
        flatgain_problem_parse(at, (size_t)(end - at), "example", "docs", &problem, &error);
        ck_assert_msg(problem != NULL, "example %d: %s", count + 1, error.text);
        ck_assert(problem->warnings == NULL);
        flatgain_problem_free(problem);
        at = end + 3;
    }
    ck_assert_int_ge(count, 3);
    free(manual);
}
END_TEST

/* ---- files made to hurt --------------------------------------------------------------------------- */

/* Text `before`, `times` times `piece`, `after`; read or refused within seconds. */
static void refuse(const char *before, const char *piece, size_t times, const char *after,
                   const char *expected)
{
    struct fg_text text = {0};
    fg_text_add(&text, before);
    for (size_t i = 0; i < times; i++)
        fg_text_add(&text, piece);
    fg_text_add(&text, after);
    ck_assert(!text.failed);
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    clock_t start = clock();
    flatgain_problem_parse(text.at, text.length, "big", NULL, &problem, &error);
    double seconds = (double)(clock() - start) / CLOCKS_PER_SEC;
    ck_assert(problem == NULL);
    ck_assert_msg(strstr(error.text, expected) != NULL, "found %s, expected %s", error.text, expected);
    ck_assert_msg(seconds < 20, "%s took %g s", expected, seconds);
    fg_text_free(&text);
}

START_TEST(nasty_files_are_refused_quickly)
{
    refuse("", "[", 20000, "", "nested more than 8 deep");
    refuse("a: ", "{a: ", 20000, "", "nested more than 8 deep");
    refuse("", "- ", 1000000, "", "nested more than 8 deep");
    refuse("", "k: 1\n", 300, "", "duplicate key");
    refuse("{", "\"a\":1,", 1, "\"b\": *a}", "an alias");
    refuse("plant:\n  A: |\n", "    1 2 3 4 5 6 7 8\n", 2500000, "", "no setting");
    refuse("setting: discrete\nplant:\n  A: |\n", "    1 2 3 4 5 6 7 8\n", 2500000, "",
           "more than 4000000 entries");
    refuse("setting: discrete\nplant:\n  A: [[1", ",1", 20000000, "]]\n", "more than 2500000 entries");
    refuse("setting: discrete\nplant: {A: ", "9", 40000000, "}\n", "40000000 characters");
    refuse("title: \"", "\\n", 20000000, "\"\nsetting: discrete\n", "title has");
    refuse("", "#", 53000000, "", "larger than 50 MB");
    char key[5000] = "";
    for (int i = 0; i < 300; i++)
        snprintf(key + strlen(key), sizeof key - strlen(key), "k%d: 1\n", i);
    refuse(key, "", 0, "", "more than 200 keys");
}
END_TEST

/* A large file that is right: 50 MB of comments around a problem. */
START_TEST(large_valid_file_is_read)
{
    struct fg_text text = {0};
    for (int i = 0; i < 500000; i++)
        fg_text_add(
            &text, "# A comment of about one hundred characters, as a generator of files might write it down "
                   "here ....\n");
    fg_text_add(&text, BLOCKS);
    ck_assert(text.length > 48000000);
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    flatgain_problem_parse(text.at, text.length, "big", NULL, &problem, &error);
    ck_assert_msg(problem != NULL, "%s", error.text);
    flatgain_problem_free(problem);
    fg_text_free(&text);
}
END_TEST

START_TEST(misuse_is_told)
{
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    ck_assert_int_eq(flatgain_problem_read("tests/reader", &problem, &error), FLATGAIN_CANNOT_READ);
    ck_assert_str_eq(error.text, "tests/reader: cannot read: it is a folder; expected a problem file");
    ck_assert_int_eq(flatgain_problem_read("tests/reader/none", &problem, &error), FLATGAIN_CANNOT_READ);
    ck_assert_int_eq(flatgain_problem_read(NULL, &problem, NULL), FLATGAIN_BAD_ARGUMENT);
    ck_assert_int_eq(flatgain_problem_parse(NULL, 3, "f", NULL, &problem, NULL), FLATGAIN_BAD_ARGUMENT);
    ck_assert_int_eq(flatgain_problem_parse("", 0, "f", NULL, &problem, &error), FLATGAIN_BAD_PROBLEM);
    ck_assert_int_eq(error.line, 1);
    ck_assert_int_eq(error.column, 1);
}
END_TEST

/* ---- gains ------------------------------------------------------------------------------------- */

struct gain_case {
    const char *text, *expected; /* NULL: 1.5, -2 */
};

static const struct gain_case GAINS[] = {
    {"1.5,-2\n", NULL},
    {"\xef\xbb\xbf 1.5\t-2 # typed in March\r\n\r\n", NULL},
    {"%%MatrixMarket matrix array real general\n1 2\n1.5\n-2\n", NULL},
    {"%%matrixmarket MATRIX coordinate real general\n% a comment\n1 2 2\n1 2 -2\n1 1 1.5\n", NULL},
    {"{\"format\": \"flatgain-result\", \"version\": 1, \"gain\": {\"K\": [[1.5, -2]], \"convention\": \"u = "
     "u0\"}}",
     NULL},
    {" \n{\"gain\":{\"K\":[[1.5,-2e0]]},\"format\":\"flatgain-result\",\"x\":[[[[[[[[[[1]]]]]]]]]]}\n", NULL},
    {"", "g:1:1: gain is empty; expected rows of numbers"},
    {"1.5\n-2\n",
     "g:1:1: the gain is 2 x 1; expected 1 x 2 (1 inputs, 2 outputs of the problem); it looks transposed"},
    {"1.5, nan\n", "g:1:6: gain row 1, column 2: \"nan\" is not a finite number; expected one"},
    {"1.5, 1e999\n", "g:1:6: gain row 1, column 2: \"1e999\" is too large; expected a number below 1.8e308"},
    {"y1,y2\n", "g:1:1: gain row 1, column 1: \"y1\" is not a number; expected one such as -0.5 or 1e-3"},
    {"{}", "g:1:1: not a result file; expected \"format\": \"flatgain-result\", or rows of numbers"},
    {"{\"format\":\"other\"}",
     "g:1:11: not a result file; expected \"format\": \"flatgain-result\", or rows of numbers"},
    {"{\"format\":\"flatgain-result\",\"gain\":null}",
     "g:1:1: the result has no gain (none was found); expected a result with a gain"},
    {"{\"format\":\"flatgain-result\",\"gain\":{\"K\":null}}",
     "g:1:36: the gain of the result has no matrix K; expected rows of numbers"},
    {"{\"format\":\"flatgain-result\",\"gain\":{\"K\":[[1,null]]}}",
     "g:1:45: K row 1, column 2: null where an entry belongs; expected a number"},
    {"{\"format\":\"flatgain-result\"",
     "g:2:1: not valid YAML: did not find expected ',' or '}' while parsing a flow "
     "mapping that starts at line 1, column 1; expected something else here or "
     "just before"},
};

START_TEST(gains_are_read)
{
    flatgain_problem *problem = must_parse("setting: discrete\nplant: {A: 0.5, B: 1, C: [[1], [2]]}\n"
                                           "disturbance: {W: 1}\nweights: {Q: 1, R: 1}\n");
    for (size_t i = 0; i < sizeof GAINS / sizeof *GAINS; i++) {
        double gain[2] = {0};
        flatgain_error error = {0};
        flatgain_status status =
            fg_gain_parse(GAINS[i].text, strlen(GAINS[i].text), "g", problem, gain, &error);
        if (GAINS[i].expected) {
            ck_assert_int_eq(status, FLATGAIN_BAD_PROBLEM);
            ck_assert_str_eq(error.text, GAINS[i].expected);
        } else {
            ck_assert_msg(status == FLATGAIN_OK, "%s", error.text);
            ck_assert(gain[0] == 1.5 && gain[1] == -2);
        }
    }
    double gain[2];
    flatgain_error error = {0};
    ck_assert_int_eq(flatgain_gain_read("tests/reader/none.csv", problem, gain, &error),
                     FLATGAIN_CANNOT_READ);
    ck_assert_int_eq(flatgain_gain_read("tests/reader/data/gain.csv", problem, gain, &error), FLATGAIN_OK);
    ck_assert(gain[0] == 1.5 && gain[1] == -2);
    flatgain_problem_free(problem);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("reader");
    TCase *forms = tcase_create("forms"), *files = tcase_create("files"), *nasty = tcase_create("nasty");
    tcase_add_test(forms, every_form_is_the_same_problem);
    tcase_add_test(forms, names_ties_and_bounds);
    tcase_add_test(forms, numbers_are_decimal);
    tcase_add_test(forms, references_are_counted);
    tcase_add_test(forms, misuse_is_told);
    tcase_add_test(forms, gains_are_read);
    tcase_add_test(files, every_data_file_says_what_is_expected);
    tcase_add_test(files, examples_of_the_manual_are_right);
    tcase_set_timeout(files, 60);
    tcase_add_test(nasty, nasty_files_are_refused_quickly);
    tcase_add_test(nasty, large_valid_file_is_read);
    tcase_set_timeout(nasty, 300);
    suite_add_tcase(suite, forms);
    suite_add_tcase(suite, files);
    suite_add_tcase(suite, nasty);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
