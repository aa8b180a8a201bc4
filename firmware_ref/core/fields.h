/* The fields of a request, read in their one spelling (SPEC FIELD-1 to FIELD-5, BAD-5). */
#ifndef RAMPRIG_FIELDS_H
#define RAMPRIG_FIELDS_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

#define RR_ARGUMENTS_MAX 4u

/* The arguments of a request by place. Signed ones are kept as their two's complement; words as their number, that of a
 * limit as its row (limits.h). */
struct rr_arguments {
    uint32_t value[RR_ARGUMENTS_MAX];
    uint8_t count;
};

/* The number of the request's word, or RR_WORD_COUNT. `rest` is set to what follows the word: "" or from its space on. */
uint8_t rr_fields_word(const char *text, const char **rest);

/* Reads what follows the word by the word's kinds. False where the number or the spelling is wrong. */
bool rr_fields_arguments(uint8_t word, const char *rest, struct rr_arguments *arguments);

/* The value of a hex digit, -1 where it is none. */
int8_t rr_fields_hex(char c);

/* The states in which the word is allowed, as bits. */
uint8_t rr_fields_states(uint8_t word);

#endif
