/* A packed block of samples, built sample by sample in the bits of its payload (SPEC DATA-2 to DATA-9). */
#ifndef RAMPRIG_BLOCK_H
#define RAMPRIG_BLOCK_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

/* The first bit of each kind of channel in a mask; an axis has three, from its own first bit on. */
#define RR_FIRST_BIT(NAME, per, first, step, width, order) RR_CHANNEL_##NAME = first,
enum rr_channel_bit { RR_CHANNEL_LIST(RR_FIRST_BIT) };
#undef RR_FIRST_BIT
#define RR_AXIS_CHANNELS 3u

/* The most channels a block of this build can have, and how many of them can be of order 2. */
#define RR_CHANNELS (3 * RR_AXES + RR_SERVOS + 3)
#define RR_SECOND_ORDER (2 * RR_AXES)

/* Bytes for a payload of so many characters; one more, so that the last character's unused bits have a place. */
#define RR_BLOCK_BYTES(characters) ((characters) * 6u / 8u + 2u)

struct rr_channel {
    int32_t value; /* of the sample before */
    RR_U24 sum;    /* A of DATA-7 */
    uint8_t bit;   /* in the mask */
};

struct rr_block {
    struct rr_channel *channel;
    uint8_t *bytes; /* of the payload */
    uint16_t room;  /* bits */
    uint16_t bits;  /* written */
    uint8_t samples; /* 0 = not open */
    uint8_t channels;
    uint8_t count; /* N of DATA-7: the same for all channels, each has one residual a sample */
    uint16_t period;
    uint32_t mask;
    uint32_t first_tick;
    int32_t difference[RR_SECOND_ORDER]; /* before the last, in order of the channels of order 2 */
};

/* Makes ready for blocks of these channels: the first begins with RICE_K_START. `channel` is the caller's memory for as
 * many channels as the mask has bits. */
void rr_block_prepare(struct rr_block *block, uint32_t mask, uint16_t period, struct rr_channel *channel);

/* Where the next block's payload goes: `characters` at most, in RR_BLOCK_BYTES of the caller's memory. */
void rr_block_place(struct rr_block *block, uint8_t *bytes, uint8_t characters);

/* Adds a sample, its values in order of their bits; they are held to their widths. False where it does not fit: close,
 * place and add the same sample again. */
bool rr_block_add(struct rr_block *block, uint32_t tick, const int32_t *values);

/* Ends the payload, makes ready for the next block, and returns the payload's length in characters. */
uint8_t rr_block_close(struct rr_block *block);

/* The value held at the ends of its channel's width. */
int32_t rr_block_held(uint8_t bit, int32_t value);

#endif
