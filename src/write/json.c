#include "write/write.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#include "write/json_parts.h"

static void write_cost(struct fg_json *json, cJSON *root, const struct fg_findings *f)
{
    cJSON *cost = fg_json_object(json, root, "cost");
    bool judged = f->outcome == FLATGAIN_JUDGED;
    fg_json_number(json, cost, "tuned", judged ? NAN : f->cost);
    fg_json_number(json, cost, "judged", judged ? f->cost : NAN);
    fg_json_number(json, cost, "none", f->cost_none);
    fg_json_number(json, cost, "today", f->cost_today);
    fg_json_number(json, cost, "lqg", f->cost_lqg);
    fg_json_number(json, cost, "lqr", f->cost_lqr);
    fg_json_number(json, cost, "gap_percent", f->gap_percent);
    fg_json_number(json, cost, "captured_percent", f->captured_percent);
    fg_json_text(json, cost, "reading", f->problem->reading == FG_START ? "start" : "average");
    bool has_lqg = isfinite(f->cost_lqg), has_lqr = isfinite(f->cost_lqr);
    fg_json_text(json, cost, "lqg_is", !has_lqg ? NULL : f->lqg_attained ? "attained" : "limit");
    fg_json_text(json, cost, "lqr_is", !has_lqr ? NULL : f->lqr_attained ? "attained" : "limit");
    fg_json_text(json, cost, "lqg_why", f->lqg_why);
    fg_json_text(json, cost, "lqr_why", f->lqr_why);
}

static void write_ladder(struct fg_json *json, cJSON *root, const struct fg_findings *f)
{
    cJSON *ladder = fg_json_array(json, root, "ladder");
    for (int k = 0; k < f->rungs && !json->failed; k++) {
        const struct fg_rung *rung = &f->ladder[k];
        cJSON *one = fg_json_object(json, ladder, NULL);
        fg_json_text(json, one, "rung", rung->key);
        fg_json_text(json, one, "label", rung->label);
        fg_json_number(json, one, "cost", rung->cost);
        fg_json_number(json, one, "above_lqg_percent", rung->above_lqg_percent);
        fg_json_number(json, one, "price_percent", rung->price_percent);
        fg_json_text(json, one, "price", rung->price[0] ? rung->price : NULL);
        fg_json_text(json, one, "note", rung->note);
    }
}

static const char *verdict_word(enum fg_verdict verdict)
{
    switch (verdict) {
    case FG_VERDICT_ACCEPTED:
        return "accepted";
    case FG_VERDICT_REFUSED:
        return "refused";
    case FG_VERDICT_CANNOT_TELL:
        return "cannot-tell";
    case FG_VERDICT_NONE:
        break;
    }
    return NULL;
}

static void write_poles(struct fg_json *json, cJSON *root, const char *key, const struct fg_findings *f,
                        const struct fg_pole *poles)
{
    if (!poles) {
        fg_json_null(json, root, key);
        return;
    }
    cJSON *list = fg_json_array(json, root, key);
    for (int k = 0; k < f->order && !json->failed; k++) {
        cJSON *one = fg_json_object(json, list, NULL);
        fg_json_number(json, one, "re", poles[k].re);
        fg_json_number(json, one, "im", poles[k].im);
        fg_json_number(json, one, "damping", poles[k].damping);
        if (f->problem->setting == FG_DISCRETE)
            fg_json_number(json, one, "radius", poles[k].speed);
        else
            fg_json_number(json, one, "speed", poles[k].speed);
        fg_json_text(json, one, "states", poles[k].states);
    }
}

static void write_margins(struct fg_json *json, cJSON *root, const struct fg_findings *f)
{
    if (f->margins == 0) {
        fg_json_null(json, root, "margins");
        return;
    }
    cJSON *object = fg_json_object(json, root, "margins");
    fg_json_number(json, object, "peak_sensitivity", f->peak_sensitivity);
    fg_json_number(json, object, "peak_frequency", f->peak_frequency);
    cJSON *loops = fg_json_array(json, object, "loops");
    for (int k = 0; k < f->margins && !json->failed; k++) {
        const struct fg_loop_margin *loop = &f->margin[k];
        cJSON *one = fg_json_object(json, loops, NULL);
        fg_json_text(json, one, "input", f->problem->inputs[loop->input].name);
        fg_json_number(json, one, "gain_down", loop->gain_down);
        fg_json_number(json, one, "gain_down_frequency", loop->gain_down_frequency);
        fg_json_number(json, one, "gain_up", loop->gain_up);
        fg_json_number(json, one, "gain_up_frequency", loop->gain_up_frequency);
        fg_json_flag(json, one, "gain_up_unlimited", isinf(loop->gain_up));
        fg_json_number(json, one, "phase_deg", loop->phase_deg);
        fg_json_number(json, one, "phase_frequency", loop->phase_frequency);
        fg_json_flag(json, one, "phase_unlimited", isinf(loop->phase_deg));
        fg_json_number(json, one, "peak_sensitivity", loop->peak_sensitivity);
        fg_json_number(json, one, "peak_frequency", loop->peak_frequency);
    }
}

static void write_hidden(struct fg_json *json, cJSON *root, const struct fg_findings *f)
{
    cJSON *list = fg_json_array(json, root, "hidden_modes");
    for (int k = 0; k < f->hidden && !json->failed; k++) {
        const struct fg_hidden_mode *mode = &f->hidden_modes[k];
        cJSON *one = fg_json_object(json, list, NULL);
        fg_json_number(json, one, "re", mode->re);
        fg_json_number(json, one, "im", mode->im);
        fg_json_flag(json, one, "unstable", mode->unstable);
        fg_json_flag(json, one, "uncontrollable", mode->uncontrollable);
        fg_json_flag(json, one, "unobservable", mode->unobservable);
        fg_json_flag(json, one, "unweighted", mode->unweighted);
        fg_json_flag(json, one, "undisturbed", mode->undisturbed);
        fg_json_text(json, one, "states", mode->states);
    }
}

static void write_search(struct fg_json *json, cJSON *root, const struct fg_findings *f, bool timing)
{
    if (f->search.starts == 0) {
        fg_json_null(json, root, "search");
        return;
    }
    cJSON *search = fg_json_object(json, root, "search");
    fg_json_whole(json, search, "starts", f->search.starts);
    fg_json_whole(json, search, "stabilised", f->search.stabilised);
    cJSON *minima = fg_json_array(json, search, "minima");
    for (int k = 0; k < f->search.distinct && f->search.minima && !json->failed; k++) {
        const struct fg_minimum *minimum = &f->search.minima[k];
        cJSON *one = fg_json_object(json, minima, NULL);
        fg_json_number(json, one, "cost", minimum->cost);
        fg_json_whole(json, one, "hits", minimum->hits);
        if (minimum->K)
            fg_json_rows(json, one, "K", (struct fg_matrix){f->problem->m, f->problem->p, minimum->K});
    }
    fg_json_whole(json, search, "evaluations", f->search.evaluations);
    fg_json_number(json, search, "residual", f->search.residual);
    fg_json_number(json, search, "smallest_curvature", f->search.smallest_curvature);
    fg_json_whole(json, search, "at_bound", f->search.at_bound);
    fg_json_flag(json, search, "rule_satisfied", f->search.rule_satisfied);
    fg_json_number(json, search, "expected_minima", f->search.expected_minima);
    fg_json_number(json, search, "least_unstable", f->search.least_unstable);
    /* a 64-bit seed does not survive readers that keep numbers as doubles: text when it is that large */
    if (f->search.seed <= (1ULL << 53))
        fg_json_whole(json, search, "seed", (long long)f->search.seed);
    else {
        char seed[24];
        snprintf(seed, sizeof seed, "%llu", (unsigned long long)f->search.seed);
        fg_json_text(json, search, "seed", seed);
    }
    if (timing)
        fg_json_number(json, search, "seconds", f->search.seconds);
}

static void write_proof(struct fg_json *json, cJSON *root, const struct fg_findings *f)
{
    if (!f->proof.kind) {
        fg_json_null(json, root, "proof");
        return;
    }
    cJSON *proof = fg_json_object(json, root, "proof");
    fg_json_text(json, proof, "kind", f->proof.kind);
    fg_json_text(json, proof, "text", f->proof.text);
    if (isfinite(f->proof.re)) {
        cJSON *mode = fg_json_object(json, proof, "mode");
        fg_json_number(json, mode, "re", f->proof.re);
        fg_json_number(json, mode, "im", f->proof.im);
        fg_json_text(json, mode, "states", f->proof.states);
    }
    if (isfinite(f->proof.sum))
        fg_json_number(json, proof, "sum", f->proof.sum);
}

static cJSON *build(struct fg_json *json, const struct fg_findings *f, const flatgain_style *style)
{
    cJSON *root = fg_json_object(json, NULL, NULL);
    fg_json_text(json, root, "format", "flatgain-result");
    fg_json_whole(json, root, "version", 1);
    fg_json_text(json, root, "program", FLATGAIN_VERSION);
    fg_json_text(json, root, "outcome", flatgain_outcome_name(f->outcome));
    fg_json_whole(json, root, "exit_status", f->exit_status);
    fg_json_flag(json, root, "complete", f->complete);
    fg_json_text(json, root, "summary", f->summary);
    if (f->has_gain) {
        cJSON *gain = fg_json_object(json, root, "gain");
        fg_json_rows(json, gain, "K", (struct fg_matrix){f->problem->m, f->problem->p, f->K});
        fg_json_text(json, gain, "convention", "u = u0 - K (y - y0)");
        fg_json_flag(json, gain, "stable", f->stable);
    } else {
        fg_json_null(json, root, "gain");
    }
    write_cost(json, root, f);
    fg_json_text(json, root, "verdict", verdict_word(f->verdict));
    fg_json_text(json, root, "verdict_text", f->verdict_text[0] ? f->verdict_text : NULL);
    write_ladder(json, root, f);
    write_poles(json, root, "poles", f, f->poles);
    write_poles(json, root, "open_poles", f, f->open_poles);
    write_margins(json, root, f);
    write_hidden(json, root, f);
    fg_json_number(json, root, "condition", f->condition);
    write_search(json, root, f, style->timing);
    write_proof(json, root, f);
    cJSON *warnings = fg_json_array(json, root, "warnings");
    for (const struct fg_finding_warning *w = f->warnings; w && !json->failed; w = w->next) {
        cJSON *one = fg_json_object(json, warnings, NULL);
        fg_json_text(json, one, "code", w->code);
        fg_json_text(json, one, "text", w->text);
    }
    fg_json_problem(json, root, f->problem);
    return root;
}

/* cJSON indents with tabs; two blanks read better. A tab inside a string is written as \t, so every tab
 * in the text is one of indentation or the one after a key's colon. */
static void add_without_tabs(struct fg_text *text, const char *printed)
{
    bool line_start = true;
    for (const char *at = printed; *at;) {
        size_t run = strcspn(at, "\t\n");
        if (run > 0) {
            fg_text_add_bytes(text, at, run);
            line_start = false;
            at += run;
        } else if (*at == '\t') {
            fg_text_add(text, line_start ? "  " : " ");
            at++;
        } else {
            fg_text_add(text, "\n");
            line_start = true;
            at++;
        }
    }
    fg_text_add(text, "\n");
}

bool fg_write_json(const struct fg_findings *findings, const flatgain_style *style, struct fg_text *text)
{
    struct fg_json json = {false};
    cJSON *root = build(&json, findings, style);
    char *printed = json.failed ? NULL : cJSON_Print(root);
    cJSON_Delete(root);
    if (!printed)
        return false;
    add_without_tabs(text, printed);
    cJSON_free(printed);
    return !text->failed;
}
