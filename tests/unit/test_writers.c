/* The writers on findings filled in by hand. The expected properties are derived from docs/result-format.md
 * and docs/commands.md; no number here comes from a solver. */
#include <check.h>
#include <cjson/cJSON.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "write/layout.h"
#include "write/write.h"

/* A problem and findings with everything a writer can meet: m = 2, p outputs, infinities, missing numbers. */
struct sample {
    struct flatgain_problem problem;
    struct fg_findings findings;
    struct fg_signal inputs[2], outputs[40], states[3];
    struct fg_rung ladder[4];
    struct fg_pole poles[3];
    struct fg_loop_margin margin[2];
    struct fg_minimum minima[2];
    struct fg_finding_warning warnings[2];
    double K[80], K_rows[80];
    char names[40][80];
};

static void fill_pattern(struct sample *s, struct fg_arena *arena)
{
    struct fg_pattern *pattern = &s->problem.pattern;
    int m = s->problem.m, p = s->problem.p, count = m * p;
    *pattern = (struct fg_pattern){.m = m, .p = p, .count = count};
    pattern->index = fg_arena_ints(arena, (size_t)count);
    pattern->sign = fg_arena_doubles(arena, (size_t)count);
    pattern->fixed = fg_arena_doubles(arena, (size_t)count);
    pattern->lower = fg_arena_doubles(arena, (size_t)count);
    pattern->upper = fg_arena_doubles(arena, (size_t)count);
    for (int k = 0; k < count; k++) {
        pattern->index[k] = k;
        pattern->sign[k] = 1;
        pattern->lower[k] = -INFINITY;
        pattern->upper[k] = INFINITY;
    }
    pattern->index[1] = -1; /* second input, first output: fixed at 0 */
    pattern->sign[1] = 0;
    pattern->upper[0] = s->K[0]; /* first entry on its upper bound */
    pattern->sign[2] = -1;       /* and one tied to nothing with a minus */
}

static struct sample *make_sample(int p, const char *output_name)
{
    struct sample *s = calloc(1, sizeof *s);
    ck_assert_ptr_nonnull(s);
    struct flatgain_problem *problem = &s->problem;
    struct fg_arena *arena = &s->findings.arena;
    problem->title =
        "Mixing drum, with a title that is far too long for one line of an eighty-column terminal";
    problem->time_unit = "s";
    problem->n = 3;
    problem->m = 2;
    problem->p = p;
    problem->A = fg_matrix_identity(arena, 3);
    problem->B = fg_matrix_new(arena, 3, 2);
    problem->C = fg_matrix_new(arena, p, 3);
    problem->D = fg_matrix_new(arena, p, 2);
    problem->W = fg_matrix_identity(arena, 3);
    problem->V = fg_matrix_new(arena, p, p);
    problem->Q = fg_matrix_identity(arena, 3);
    problem->R = fg_matrix_identity(arena, 2);
    problem->N = fg_matrix_new(arena, 3, 2);
    FG_AT(problem->A, 0, 1) = 0.1 + 0.2; /* needs 17 digits */
    FG_AT(problem->A, 1, 0) = -0.0;
    problem->accept_percent = 10;
    problem->hash = 0x00ff00ff12345678u;
    s->inputs[0] = (struct fg_signal){.name = "drum speed", .unit = "rpm"};
    s->inputs[1] = (struct fg_signal){.name = "Zulauf \xC3\x9C"
                                              "ber",
                                      .unit = ""};
    for (int j = 0; j < p; j++) {
        snprintf(s->names[j], sizeof s->names[j], output_name, j + 1);
        s->outputs[j] = (struct fg_signal){.name = s->names[j], .unit = ""};
    }
    for (int i = 0; i < 3; i++)
        s->states[i] = (struct fg_signal){.name = "x", .unit = ""};
    problem->inputs = s->inputs;
    problem->outputs = s->outputs;
    problem->states = s->states;
    for (int k = 0; k < 2 * p; k++)
        s->K[k] = k == 1 ? 0 : (k % 3 - 1.23456789) * pow(10, k % 7 - 3);
    fill_pattern(s, arena);

    struct fg_findings *f = &s->findings;
    f->problem = problem;
    f->outcome = FLATGAIN_TUNED;
    f->exit_status = 1;
    f->summary =
        "Found a stabilising gain of cost 1.5, with a sentence long enough to be wrapped on the page.";
    f->complete = f->has_gain = f->stable = true;
    f->K = s->K;
    f->K_rows = s->K_rows;
    f->cost = 1.0 / 3.0;
    f->cost_none = f->cost_today = NAN;
    f->cost_lqg = 0.25;
    f->cost_lqr = 1e-5;
    f->gap_percent = 100.0 / 3.0;
    f->captured_percent = NAN;
    f->verdict = FG_VERDICT_CANNOT_TELL;
    f->verdict_text = "Cannot tell whether static is good enough.";
    s->ladder[0] = (struct fg_rung){"none", "no control", NAN, NAN, NAN, "", "unstable"};
    s->ladder[1] = (struct fg_rung){
        "tuned", "tuned gain", f->cost, 100.0 / 3.0, 100.0 / 3.0, "price of staying static", ""};
    s->ladder[2] = (struct fg_rung){"lqg",   "any linear controller (LQG)",        0.25,     0,
                                    2499900, "price of not measuring every state", "a limit"};
    s->ladder[3] = (struct fg_rung){"lqr", "every state known (LQR)", 1e-5, NAN, NAN, "", ""};
    f->rungs = 4;
    f->ladder = s->ladder;
    f->order = 3;
    s->poles[0] = (struct fg_pole){-0.1, 0, 1, 0.1, "x, and many more names of states than fit on a line"};
    s->poles[1] = (struct fg_pole){-1, 2, 0.447, 2.236, "x"};
    s->poles[2] = (struct fg_pole){-1, -2, 0.447, 2.236, "x"};
    f->poles = f->open_poles = s->poles;
    f->radius = NAN;
    f->abscissa = -0.1;
    s->margin[0] = (struct fg_loop_margin){0, 0, INFINITY, INFINITY, NAN, NAN, NAN, 1, 0};
    s->margin[1] = (struct fg_loop_margin){1, 0.2, 4, 55, 1.5, 2.5, 0.5, 1.6, 2};
    f->margins = 2;
    f->margin = s->margin;
    f->peak_sensitivity = 1.7;
    f->peak_frequency = 2;
    f->condition = NAN;
    f->search.starts = 8;
    f->search.stabilised = 8;
    f->search.distinct = 2;
    s->minima[0] = (struct fg_minimum){1.0 / 3.0, 6, s->K};
    s->minima[1] = (struct fg_minimum){0.4, 2, s->K};
    f->search.minima = s->minima;
    f->search.residual = 1e-12;
    f->search.smallest_curvature = 0.1;
    f->search.expected_minima = 2.2;
    f->search.least_unstable = NAN;
    f->search.seconds = 0.5;
    f->search.seed = 1;
    f->proof.text = f->proof.states = "";
    f->proof.re = f->proof.im = f->proof.sum = NAN;
    s->warnings[0] =
        (struct fg_finding_warning){"first", "A warning with \"quotes\", a \\ and a\ttab.", NULL};
    s->warnings[1] = (struct fg_finding_warning){
        "second",
        "Another one that is long enough to need wrapping because it says what to do next in detail.", NULL};
    s->warnings[0].next = &s->warnings[1];
    f->warnings = s->warnings;
    return s;
}

static void free_sample(struct sample *s)
{
    fg_arena_release(&s->findings.arena);
    free(s);
}

static char *text_of(const struct sample *s, flatgain_style style)
{
    struct fg_text text = {0};
    fg_write_text(&s->findings, &style, &text);
    ck_assert(!text.failed);
    ck_assert_ptr_nonnull(text.at);
    return text.at;
}

static char *json_of(const struct sample *s, flatgain_style style)
{
    struct fg_text text = {0};
    ck_assert(fg_write_json(&s->findings, &style, &text));
    return text.at;
}

/* The longest line in code points; fails on blanks at the end of a line. */
static int widest_line(const char *text)
{
    int widest = 0;
    while (*text) {
        size_t length = strcspn(text, "\n");
        char *line = strndup(text, length);
        ck_assert_ptr_nonnull(line);
        ck_assert_msg(length == 0 || line[length - 1] != ' ', "blank at the end: '%s'", line);
        int columns = fg_columns(line);
        if (columns > widest)
            widest = columns;
        free(line);
        text += length + (text[length] == '\n');
    }
    return widest;
}

START_TEST(columns_are_code_points)
{
    ck_assert_int_eq(fg_columns("abc"), 3);
    ck_assert_int_eq(fg_columns("\xC3\x9C"
                                "ber"),
                     4);                                         /* U+00DC */
    ck_assert_int_eq(fg_columns("\xE6\xB8\xA9\xE5\xBA\xA6"), 2); /* U+6E29 U+5EA6 */
    ck_assert_int_eq(fg_columns("\xF0\x9F\x8C\xA1"), 1);         /* U+1F321 */
}
END_TEST

START_TEST(text_fits_80_columns)
{
    static const struct {
        int p;
        const char *name;
    } shapes[] = {{2, "y%d"},
                  {40, "y%d"},
                  {6, "Temperatur \xC3\x9C"
                      "ber Zone %d"},
                  {3, "an output name that is so long that no column can have it as its head, number %d"},
                  {1, "pressure"}};
    for (size_t k = 0; k < sizeof shapes / sizeof shapes[0]; k++)
        for (int verbose = -1; verbose <= 1; verbose++) {
            struct sample *s = make_sample(shapes[k].p, shapes[k].name);
            char *text = text_of(s, (flatgain_style){.verbose = verbose, .timing = 1});
            if (verbose >= 0)
                ck_assert_int_le(widest_line(text), 80);
            ck_assert_ptr_null(strchr(text, '\033'));
            ck_assert_ptr_null(strchr(text, '\t'));
            ck_assert_ptr_null(strstr(text, "nan"));
            free(text);
            free_sample(s);
        }
}
END_TEST

START_TEST(wide_gain_shows_every_entry)
{
    struct sample *s = make_sample(40, "y%d");
    char *text = text_of(s, (flatgain_style){0});
    for (int j = 1; j <= 40; j++) {
        char name[16];
        snprintf(name, sizeof name, " y%d", j);
        ck_assert_msg(strstr(text, name) != NULL, "%s", name);
    }
    free(text);
    free_sample(s);
}
END_TEST

START_TEST(text_says_what_matters)
{
    struct sample *s = make_sample(2, "y%d");
    s->outputs[1].lag = 0.25;
    s->outputs[1].lag_in_plc = true;
    char *text = text_of(s, (flatgain_style){.width = 100});
    ck_assert_ptr_nonnull(strstr(text, "u = u0 - K (y - y0)"));
    ck_assert_ptr_nonnull(strstr(text, "Zulauf"));
    ck_assert_ptr_nonnull(strstr(text, "[0]"));      /* fixed by the user */
    ck_assert_ptr_nonnull(strstr(text, "*"));        /* on its bound */
    ck_assert_ptr_nonnull(strstr(text, "unstable")); /* the rung without control */
    ck_assert_ptr_nonnull(strstr(text, "price of staying static: 33.3 %"));
    ck_assert_ptr_nonnull(strstr(text, "price of not measuring every state: over 1 million %"));
    ck_assert_ptr_nonnull(strstr(text, "unit of the output: drum speed rpm\n")); /* the only unit given */
    ck_assert_ptr_nonnull(strstr(text, "filter y2 in the PLC with a time constant of 0.25 s"));
    ck_assert_ptr_null(strstr(text, "filter y1 in the PLC"));
    ck_assert_ptr_nonnull(strstr(text, "commission with limits"));
    ck_assert_ptr_null(strstr(text, "seconds")); /* not asked for */
    free(text);
    free_sample(s);
}
END_TEST

START_TEST(colour_only_when_asked)
{
    struct sample *s = make_sample(2, "y%d");
    char *plain = text_of(s, (flatgain_style){0}), *coloured = text_of(s, (flatgain_style){.color = 1});
    ck_assert_ptr_null(strchr(plain, '\033'));
    ck_assert_ptr_nonnull(strchr(coloured, '\033'));
    char *to = coloured; /* without the escapes it is the same text */
    for (const char *at = coloured; *at; at++) {
        if (*at == '\033')
            at += strcspn(at, "m");
        else
            *to++ = *at;
    }
    *to = '\0';
    ck_assert_str_eq(plain, coloured);
    free(plain);
    free(coloured);
    free_sample(s);
}
END_TEST

START_TEST(quiet_is_a_gain_that_reads_back)
{
    struct sample *s = make_sample(2, "y%d");
    char *text = text_of(s, (flatgain_style){.verbose = -1});
    double a, b;
    ck_assert_int_eq(sscanf(text, "%lf,%lf", &a, &b), 2);
    ck_assert(a == s->K[0] && b == s->K[2]);
    ck_assert_ptr_nonnull(strstr(text, "# tuned, cost "));
    free(text);
    free_sample(s);
}
END_TEST

static const cJSON *at(const cJSON *object, const char *key)
{
    const cJSON *item = cJSON_GetObjectItemCaseSensitive(object, key);
    ck_assert_msg(item != NULL, "no key %s", key);
    return item;
}

START_TEST(json_parses_and_numbers_return_exactly)
{
    struct sample *s = make_sample(2, "y%d");
    char *text = json_of(s, (flatgain_style){0});
    cJSON *root = cJSON_Parse(text);
    ck_assert_ptr_nonnull(root);
    ck_assert_str_eq(at(root, "format")->valuestring, "flatgain-result");
    ck_assert_int_eq(at(root, "version")->valueint, 1);
    ck_assert_str_eq(at(root, "outcome")->valuestring, "tuned");
    const cJSON *K = at(at(root, "gain"), "K");
    ck_assert_int_eq(cJSON_GetArraySize(K), 2);
    for (int i = 0; i < 2; i++)
        for (int j = 0; j < 2; j++)
            ck_assert(cJSON_GetArrayItem(cJSON_GetArrayItem(K, i), j)->valuedouble == s->K[i + 2 * j]);
    ck_assert(at(at(root, "cost"), "tuned")->valuedouble == 1.0 / 3.0);
    ck_assert(cJSON_IsNull(at(at(root, "cost"), "none")));
    ck_assert_str_eq(at(at(root, "cost"), "lqg_is")->valuestring, "limit");
    const cJSON *A = at(at(at(root, "problem"), "plant"), "A");
    ck_assert(cJSON_GetArrayItem(cJSON_GetArrayItem(A, 0), 1)->valuedouble == 0.1 + 0.2);
    ck_assert_str_eq(at(at(root, "problem"), "hash")->valuestring, "00ff00ff12345678");
    const cJSON *loop = cJSON_GetArrayItem(at(at(root, "margins"), "loops"), 0);
    ck_assert(cJSON_IsNull(at(loop, "gain_up")) && cJSON_IsTrue(at(loop, "gain_up_unlimited")));
    const cJSON *pattern = at(at(at(root, "problem"), "gain"), "pattern");
    ck_assert_str_eq(cJSON_GetArrayItem(cJSON_GetArrayItem(pattern, 0), 0)->valuestring, "free");
    ck_assert(cJSON_GetArrayItem(cJSON_GetArrayItem(pattern, 1), 0)->valuedouble == 0);
    ck_assert_str_eq(cJSON_GetArrayItem(at(root, "warnings"), 0)->child->next->valuestring,
                     s->warnings[0].text);
    cJSON_Delete(root);
    free(text);
    free_sample(s);
}
END_TEST

START_TEST(json_has_no_nan_no_negative_zero_no_time)
{
    struct sample *s = make_sample(2, "y%d");
    char *text = json_of(s, (flatgain_style){0}), *again = json_of(s, (flatgain_style){0});
    ck_assert_str_eq(text, again);
    ck_assert_ptr_null(strstr(text, "nan"));
    ck_assert_ptr_null(strstr(text, "inf"));
    ck_assert_ptr_null(strstr(text, "-0,"));
    ck_assert_ptr_null(strstr(text, "-0]"));
    ck_assert_ptr_null(strstr(text, "seconds"));
    ck_assert_ptr_null(strchr(text, '\t'));
    ck_assert_int_eq(text[strlen(text) - 1], '\n');
    char *timed = json_of(s, (flatgain_style){.timing = 1});
    ck_assert_ptr_nonnull(strstr(timed, "\"seconds\": 0.5"));
    free(timed);
    free(again);
    free(text);
    free_sample(s);
}
END_TEST

START_TEST(outcomes_without_a_gain)
{
    static const flatgain_outcome outcomes[] = {FLATGAIN_NOT_FOUND, FLATGAIN_IMPOSSIBLE, FLATGAIN_INSPECTED,
                                                FLATGAIN_INTERRUPTED};
    for (size_t k = 0; k < 4; k++) {
        struct sample *s = make_sample(2, "y%d");
        struct fg_findings *f = &s->findings;
        f->outcome = outcomes[k];
        f->has_gain = f->stable = false;
        f->K = NULL;
        f->cost = f->gap_percent = NAN;
        f->poles = NULL;
        f->margins = 0;
        if (outcomes[k] == FLATGAIN_IMPOSSIBLE) {
            f->proof.kind = "pole-sum";
            f->proof.sum = 0;
        }
        char *text = text_of(s, (flatgain_style){.verbose = 1}), *json = json_of(s, (flatgain_style){0});
        ck_assert_int_le(widest_line(text), 80);
        ck_assert_ptr_null(strstr(text, "Gain K"));
        cJSON *root = cJSON_Parse(json);
        ck_assert_ptr_nonnull(root);
        ck_assert(cJSON_IsNull(at(root, "gain")) && cJSON_IsNull(at(root, "poles")));
        ck_assert_int_eq(cJSON_IsObject(at(root, "proof")), outcomes[k] == FLATGAIN_IMPOSSIBLE);
        cJSON_Delete(root);
        free(json);
        free(text);
        free_sample(s);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("writers");
    TCase *tests = tcase_create("writers");
    tcase_add_test(tests, columns_are_code_points);
    tcase_add_test(tests, text_fits_80_columns);
    tcase_add_test(tests, wide_gain_shows_every_entry);
    tcase_add_test(tests, text_says_what_matters);
    tcase_add_test(tests, colour_only_when_asked);
    tcase_add_test(tests, quiet_is_a_gain_that_reads_back);
    tcase_add_test(tests, json_parses_and_numbers_return_exactly);
    tcase_add_test(tests, json_has_no_nan_no_negative_zero_no_time);
    tcase_add_test(tests, outcomes_without_a_gain);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_ENV);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
