/* Numbers as text, whatever the locale of the process. */
#ifndef FG_BASE_NUMBER_H
#define FG_BASE_NUMBER_H

#include <stdbool.h>
#include <stddef.h>

enum { FG_NUMBER_SIZE = 32, FG_NUMBER_LONGEST = 400 };

/* The shortest decimal text that reads back as exactly `value` (finite), e.g. "0.1", "-3", "1e-300". */
void fg_number_exact(double value, char text[FG_NUMBER_SIZE]);

/* At most `digits` significant digits, e.g. 5: "0.12346", "1.2346e-05"; "inf", "nan" in words. */
void fg_number_round(double value, int digits, char text[FG_NUMBER_SIZE]);

/* A percentage for people: "0", "0.69", "12.3", "1960", "64600", "over 1 million"; below 0.005 it is 0. */
void fg_number_percent(double percent, char text[FG_NUMBER_SIZE]);

enum fg_number_fault { FG_NUMBER_OK, FG_NUMBER_NOT, FG_NUMBER_TOO_LARGE };

/* Reads a whole string of `length` bytes as a decimal number: [+-] digits [. digits] [e [+-] digits].
 * No hexadecimal, no inf, no nan, no blanks; more than FG_NUMBER_LONGEST bytes are NOT a number. 1e999 is
 * TOO_LARGE; 1e-999 is 0. */
enum fg_number_fault fg_number_read(const char *text, size_t length, double *value);

#endif
