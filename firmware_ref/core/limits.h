/* The limits by which the device judges: their table, rules and digest, and their store (SPEC LIMIT-1 to LIMIT-5). */
#ifndef RAMPRIG_LIMITS_H
#define RAMPRIG_LIMITS_H

#include "chain.h"
#include "guard.h"
#include "port.h"
#include "servo.h"

#include <stdbool.h>
#include <stdint.h>

/* What the device as a whole judges by. */
struct rr_board_limits {
    int32_t under_mv;
    int32_t over_mv;
    uint16_t supply_ticks;
    uint16_t stop_ticks;
};

/* All limit values, in the order of the digest: by item number, and within an item by index. */
struct rr_limits {
    int32_t value[RR_LIMITS];
};

/* The place of a limit in `value`, or RR_LIMITS where there is no such index. */
uint8_t rr_limits_place(uint8_t number, uint32_t index);

/* Why a limit must not take a value, or RR_REASON_COUNT where it may. */
uint8_t rr_limits_refusal(const struct rr_limits *limits, uint8_t number, uint32_t index, int32_t value, bool armed);

/* The defaults of the table, a ceiling held to the board's own. */
void rr_limits_defaults(struct rr_limits *limits);

uint32_t rr_limits_digest(const struct rr_limits *limits);

/* The one with this number and index, which must exist. */
int32_t rr_limits_get(const struct rr_limits *limits, uint8_t number, uint8_t index);

/* What board, chain, guard and servo judge by, taken from the values. */
void rr_limits_board(const struct rr_limits *limits, struct rr_board_limits *board);
void rr_limits_chain(const struct rr_limits *limits, uint8_t axis, struct rr_chain_limits *chain);
void rr_limits_guard(const struct rr_limits *limits, uint8_t axis, struct rr_guard_limits *guard);
void rr_limits_servo(const struct rr_limits *limits, uint8_t servo, struct rr_servo_limits *pulse);

#endif
