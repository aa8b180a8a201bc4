/* One line to the host, made character by character with its check (SPEC LINE-2, LINE-4).
 *
 * A line is a row of fields; whoever knows the line gives the next field when the last has been said. So a line takes no
 * memory but this struct, and can be said in pieces while other work goes on. */
#ifndef RAMPRIG_VOICE_H
#define RAMPRIG_VOICE_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_voice {
    const RR_FLASH char *word; /* what is left of a word */
    const uint8_t *bits;       /* a payload: six bits a character, most significant first */
    uint32_t number;           /* what is left of a number */
    uint16_t crc;
    uint8_t form; /* of the field under way: enum in voice.c */
    uint8_t lead; /* a character before the field, 0 = none */
    bool minus;   /* and a minus before the number */
    uint8_t place; /* digits or characters said of the field */
    uint8_t length; /* characters of the payload */
    uint8_t tail; /* characters of the check and LF still to say, 0 = the body is under way */
    uint8_t field; /* number of the next field */
};

/* Begins a line. */
void rr_voice_begin(struct rr_voice *voice);

/* The next character of the field under way, or 0 where it has been said whole. */
char rr_voice_next(struct rr_voice *voice);

/* Begins the line's end once the last field has been said. */
void rr_voice_end(struct rr_voice *voice);

/* The next character of the line's end; `tail` is 0 again after the LF. */
char rr_voice_tail(struct rr_voice *voice);

/* The next field: two hex digits after `lead`; or, after a space, a word, a number, a payload of `length` characters. */
void rr_voice_hex2(struct rr_voice *voice, char lead, uint8_t value);
void rr_voice_word(struct rr_voice *voice, const RR_FLASH char *word);
void rr_voice_u32(struct rr_voice *voice, uint32_t value);
void rr_voice_i32(struct rr_voice *voice, int32_t value);
void rr_voice_bits(struct rr_voice *voice, const uint8_t *bits, uint8_t length);

#endif
