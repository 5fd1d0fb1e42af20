/* Findings as text for people and as JSON for programs. Writers see findings only, never solvers. */
#ifndef FG_WRITE_WRITE_H
#define FG_WRITE_WRITE_H

#include "assess/findings.h"
#include "base/text.h"

/* Text for a terminal; see flatgain_style in flatgain.h. Check text->failed afterwards. */
void fg_write_text(const struct fg_findings *findings, const flatgain_style *style, struct fg_text *text);

/* One JSON object with a final newline (docs/result-format.md). False when memory is out. */
bool fg_write_json(const struct fg_findings *findings, const flatgain_style *style, struct fg_text *text);

#endif
