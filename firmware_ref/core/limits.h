/* The limits by which the device judges: their table, rules and digest (SPEC LIMIT-1 to LIMIT-5). */
#ifndef RAMPRIG_LIMITS_H
#define RAMPRIG_LIMITS_H

#include "chain.h"
#include "guard.h"
#include "servo.h"

#include <stdbool.h>
#include <stdint.h>

/* What the device as a whole judges by. */
struct rr_board_limits {
    uint16_t lease_ms;
    uint16_t stop_ticks;
    uint16_t under_mv;
    uint16_t over_mv;
    uint16_t supply_ticks;
};

struct rr_axis_limits {
    struct rr_chain_limits chain;
    struct rr_guard_limits guard;
};

/* A limit that was set in this tick and is in force from the next (LIMIT-4). */
struct rr_set_limit {
    int32_t value;
    uint8_t place;
};

/* The limits in force, and those set since. */
struct rr_limits {
    struct rr_board_limits board;
    struct rr_axis_limits axis[RR_AXES];
#if RR_SERVOS > 0
    struct rr_servo_limits servo[RR_SERVOS];
#endif
    struct rr_set_limit set[RR_LIMITS_SET_MAX];
    uint8_t set_count;
    uint8_t digest_place; /* the next one to go into the digest; RR_LIMITS where it is whole */
    uint32_t digest;
};

/* The row of a limit in the table of limits: the device's first, then an axis's, then a servo's. */
static inline uint8_t rr_limits_row(uint8_t number)
{
    if (number >= RR_LIMIT_PULSE_MIN_US) {
        return (uint8_t)(number - RR_LIMIT_PULSE_MIN_US + RR_DEVICE_LIMITS + RR_AXIS_LIMITS);
    }
    return (uint8_t)(number >= RR_LIMIT_CEILING_DUTY ? number - RR_LIMIT_CEILING_DUTY + RR_DEVICE_LIMITS
                                                     : number - RR_LIMIT_LEASE_MS);
}

/* Limits have places, in the order of the digest: row by row, in a row by its axes or servos. */
static inline uint8_t rr_limits_axis_place(uint8_t number, uint8_t axis)
{
    return (uint8_t)(RR_DEVICE_LIMITS + (number - RR_LIMIT_CEILING_DUTY) * RR_AXES + axis);
}

static inline uint8_t rr_limits_servo_place(uint8_t number, uint8_t servo)
{
    return (uint8_t)(RR_DEVICE_LIMITS + RR_AXIS_LIMITS * RR_AXES + (number - RR_LIMIT_PULSE_MIN_US) * RR_SERVOS + servo);
}

/* The place of a limit, or RR_LIMITS where there is no such index. */
uint8_t rr_limits_place_in_row(uint8_t row, uint32_t index);

static inline uint8_t rr_limits_place(uint8_t number, uint32_t index)
{
    return rr_limits_place_in_row(rr_limits_row(number), index);
}

/* Is the value outside the item's range, the board's, or what another limit allows (LIMIT-2)? */
bool rr_limits_is_out(const struct rr_limits *limits, uint8_t place, int32_t value);

/* Is the value looser than another one that is in force (LIMIT-3)? */
bool rr_limits_is_looser(const struct rr_limits *limits, uint8_t place, int32_t now, int32_t value);

/* May the limit at this place have this value on this board, whatever the others are? For what comes from a store. */
bool rr_limits_possible(const struct rr_limits *limits, uint8_t place, int32_t value);

/* The defaults of the table, a ceiling held to the board's own, all in force. */
void rr_limits_defaults(struct rr_limits *limits);

/* What a limit is, or will be from the next tick on. */
int32_t rr_limits_at(const struct rr_limits *limits, uint8_t place);

/* Sets a limit to a value that was not refused. At most RR_LIMITS_SET_MAX in a tick; one place counts once. */
void rr_limits_set(struct rr_limits *limits, uint8_t place, int32_t value);

/* Puts in force what has been set. */
void rr_limits_enforce(struct rr_limits *limits);

/* The digest is made a limit at a time: true while it is not whole yet. */
bool rr_limits_digest_step(struct rr_limits *limits);

#endif
