/* The protocol's words as text: a table is one text, its words in order of their numbers, each ended by a NUL, and an empty
 * word at its end. So a table has no gaps, and takes no more program memory than its letters. */
#ifndef RAMPRIG_NAMES_H
#define RAMPRIG_NAMES_H

#include "config.h"

#include <stdint.h>

/* For the lists of words.h, whose first two columns are the name and the word: `RR_STATE_LIST(RR_NAME)` is a table. */
#define RR_NAME(NAME, ...) RR_NAME_ENDED(__VA_ARGS__, 0)
#define RR_NAME_ENDED(word, ...) word "\0"

#define RR_NAME_UNKNOWN 255u

/* The word at a place; the place must be in the table. */
const RR_FLASH char *rr_names_at(const RR_FLASH char *names, uint8_t place);

/* The place of the word that has `length` letters at `text`, or RR_NAME_UNKNOWN. */
uint8_t rr_names_find(const RR_FLASH char *names, const char *text, uint8_t length);

#endif
