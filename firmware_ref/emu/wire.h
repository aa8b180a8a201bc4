/* The serial line between host and chip, byte by byte at the UART's own pace; see chip.h for the licence. */
#ifndef EMU_WIRE_H
#define EMU_WIRE_H

#include "chip.h"

#define WIRE_BYTES 65536u /* most on their way either way; more from the host is refused, more from the chip is lost */
#define RECEIVER_DEPTH 3u /* two bytes and the shift register: a fourth is lost (DOR) */

struct wire {
    struct chip *chip;
    uint16_t to_chip[WIRE_BYTES]; /* a byte, with UART_INPUT_FE for a framing error */
    uint32_t first;
    uint32_t count;
    bool under_way; /* a byte's bits are arriving */
    uint16_t shifting;
    uint64_t done_cycle;
    uint8_t from_chip[WIRE_BYTES];
    uint32_t sent;
    bool line_ended; /* an LF is among what was sent */
    uint64_t lost; /* by the receiver */
    uint32_t noise; /* one byte in so many arrives with a flipped bit; 0 = none */
    uint64_t dice;
};

void wire_begin(struct wire *wire, struct chip *chip);

/* Puts bytes from the host on the line. False, none taken, where there is no room. */
bool wire_put(struct wire *wire, const uint8_t *bytes, uint32_t count);

/* Puts one symbol on the line, such as 0 with UART_INPUT_FE: a BREAK. */
bool wire_put_symbol(struct wire *wire, uint16_t symbol);

/* A reset has emptied the chip's receiver. */
void wire_after_reset(struct wire *wire);

#endif
