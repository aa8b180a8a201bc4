/* A packed block of samples, built sample by sample in the characters of its payload (SPEC DATA-2 to DATA-9). */
#ifndef RAMPRIG_BLOCK_H
#define RAMPRIG_BLOCK_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

/* The most channels a block of this build can have. */
#define RR_CHANNELS (3 * RR_AXES + RR_SERVOS + 3)

struct rr_channel {
    int32_t value;      /* of the sample before */
    int32_t difference; /* before it, for channels of order 2 */
    uint32_t sum;       /* A of DATA-7 */
    uint8_t count;      /* N of DATA-7 */
    uint8_t start_k;    /* k of the header */
    uint8_t bit;        /* in the mask */
};

struct rr_block {
    char *payload;     /* sextets while open, characters once closed */
    uint8_t capacity;  /* characters */
    uint16_t bits;     /* written */
    uint8_t samples;   /* 0 = not open */
    uint8_t channels;
    uint32_t mask;
    uint16_t period;
    uint32_t first_tick;
    struct rr_channel channel[RR_CHANNELS];
};

/* Makes ready for blocks of these channels: the first begins with RICE_K_START. The payload's memory is the caller's. */
void rr_block_prepare(struct rr_block *block, uint32_t mask, uint16_t period, char *payload, uint8_t capacity);

/* Adds a sample, its values in order of their bits and held to their widths. False where it does not fit: close first. */
bool rr_block_add(struct rr_block *block, uint32_t tick, const int32_t *values);

/* Turns the payload into characters, makes ready for the next block, and returns the payload's length. */
uint8_t rr_block_close(struct rr_block *block);

/* The value held at the ends of its channel's width. */
int32_t rr_block_held(uint8_t bit, int32_t value);

#endif
