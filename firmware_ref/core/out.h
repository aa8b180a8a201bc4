/* One line to the host, written character by character with its check (SPEC LINE-2, LINE-4). */
#ifndef RAMPRIG_OUT_H
#define RAMPRIG_OUT_H

#include "port.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_out {
    const struct rr_port *port;
    void *self;
    char *copy; /* where a copy of the line is kept, or NULL */
    uint8_t length;
    uint16_t crc;
    bool mute; /* there was no room: the line goes nowhere but into its copy */
};

/* Begins a line of at most `longest` bytes; it is muted where the transmit queue has less room. */
void rr_out_begin(struct rr_out *out, const struct rr_port *port, void *self, char *copy, uint8_t longest);

void rr_out_char(struct rr_out *out, char c);
void rr_out_text(struct rr_out *out, const char *text);
/* A space, then the field. */
void rr_out_word(struct rr_out *out, const char *word);
void rr_out_u32(struct rr_out *out, uint32_t value);
void rr_out_i32(struct rr_out *out, int32_t value);
/* Two hex digits, without a space. */
void rr_out_hex2(struct rr_out *out, uint8_t value);

/* Ends the line with its check. Returns its length, LF included. */
uint8_t rr_out_end(struct rr_out *out);

#endif
