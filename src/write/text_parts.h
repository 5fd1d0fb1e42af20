/* Sections of the report that have a file of their own. */
#ifndef FG_WRITE_TEXT_PARTS_H
#define FG_WRITE_TEXT_PARTS_H

#include "assess/findings.h"
#include "write/layout.h"

/* The law and the gain as a table: rows are inputs, columns outputs. A table too wide for the page comes
 * in pieces; names too long for columns give one line per entry. exact: every digit. */
void fg_text_gain(const struct fg_page *page, const struct fg_findings *findings, bool exact);

/* The ladder with a bar per rung and the prices between the rungs. */
void fg_text_ladder(const struct fg_page *page, const struct fg_findings *findings, bool exact);

/* `value` in at most `digits` digits (exact: as many as it needs), "-" when it does not exist. */
const char *fg_text_number(double value, int digits, bool exact, char *number);

#endif
