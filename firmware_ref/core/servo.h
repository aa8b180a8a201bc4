/* One servo's pulse in a tick (SPEC S7, ORDER-5 and the last paragraph of section 12). */
#ifndef RAMPRIG_SERVO_H
#define RAMPRIG_SERVO_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_servo_limits {
    int32_t least_ns;
    int32_t greatest_ns; /* not below least_ns (SPEC LIMIT-2) */
    int32_t slew_ns;     /* a tick, at least 1 */
    int32_t home_ns;
};

/* The first pulse after none: home, held inside the limits. */
int32_t rr_servo_first_ns(const struct rr_servo_limits *limits);

/* The pulse held inside the limits. */
int32_t rr_servo_held_ns(const struct rr_servo_limits *limits, int32_t pulse_ns);

/* The whole us of a pulse, below 2^22 ns, without a division: an 8-bit controller has one in each sample. */
uint16_t rr_servo_us(int32_t pulse_ns);

/* The pulse one tick on from `pulse_ns` (not 0) towards `goal_ns`. */
int32_t rr_servo_step_ns(const struct rr_servo_limits *limits, int32_t pulse_ns, int32_t goal_ns);

#endif
