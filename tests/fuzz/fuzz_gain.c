/* Fuzzing of the gain reader (CSV, Matrix Market, result file) for a gain of 2 x 3. The
 * number reader gets the same bytes. */
#include <stdlib.h>
#include <string.h>

#include "base/number.h"
#include "problem/gain_read.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    const struct flatgain_problem problem = {.n = 1, .m = 2, .p = 3};
    double gain[6] = {0}, value;
    flatgain_error error = {0};
    flatgain_status status = fg_gain_parse((const char *)data, size, "g", &problem, gain, &error);
    fg_number_read((const char *)data, size, &value);
    if (status != FLATGAIN_OK && (status != FLATGAIN_BAD_PROBLEM || strncmp(error.text, "g:", 2) != 0 ||
                                  !strstr(error.text, "; expected")))
        abort();
    if (!fg_all_finite(6, gain))
        abort();
    return 0;
}
