/* One servo's pulse in a tick (SPEC S7, ORDER-5 and the last paragraph of section 12). */
#ifndef RAMPRIG_SERVO_H
#define RAMPRIG_SERVO_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

typedef RR_I24 rr_ns; /* a pulse, or a difference of two */

struct rr_servo_limits {
    rr_ns least_ns;
    rr_ns greatest_ns; /* not below least_ns (SPEC LIMIT-2) */
    rr_ns slew_ns;     /* a tick, at least 1 */
    rr_ns home_ns;
};

/*@ predicate rr_servo_limits_ok(struct rr_servo_limits *l) =
      0 < l->least_ns <= l->greatest_ns <= 2600000 && 1 <= l->slew_ns <= 2000000 && 0 <= l->home_ns <= 2600000;

    logic integer rr_held(struct rr_servo_limits *l, integer pulse_ns) =
      pulse_ns < l->least_ns ? l->least_ns : pulse_ns > l->greatest_ns ? l->greatest_ns : pulse_ns;
*/

/* The first pulse after none: home, held inside the limits. */
/*@ requires \valid_read(limits) && rr_servo_limits_ok(limits);
    assigns \nothing;
    ensures S7_inside: limits->least_ns <= \result <= limits->greatest_ns;
    ensures S7_home: \result == rr_held(limits, limits->home_ns);
*/
rr_ns rr_servo_first_ns(const struct rr_servo_limits *limits);

/* The pulse held inside the limits. */
/*@ requires \valid_read(limits) && rr_servo_limits_ok(limits);
    assigns \nothing;
    ensures S7_inside: limits->least_ns <= \result <= limits->greatest_ns;
    ensures S7_held: \result == rr_held(limits, pulse_ns);
*/
rr_ns rr_servo_held_ns(const struct rr_servo_limits *limits, rr_ns pulse_ns);

/* The whole us of a pulse, below 2^22 ns, without a division: an 8-bit controller has one in each sample. */
/*@ requires 0 <= pulse_ns < 0x400000;
    assigns \nothing;
    ensures \result == pulse_ns / 1000;
*/
uint16_t rr_servo_us(rr_ns pulse_ns);

/* The pulse one tick on from `pulse_ns` (not 0) towards `goal_ns`. */
/*@ requires \valid_read(limits) && rr_servo_limits_ok(limits);
    assigns \nothing;
    ensures S7_inside: limits->least_ns <= \result <= limits->greatest_ns;
    ensures S7_slew: -limits->slew_ns <= \result - rr_held(limits, pulse_ns) <= limits->slew_ns;
    ensures S7_arrives: -limits->slew_ns <= rr_held(limits, goal_ns) - rr_held(limits, pulse_ns) <= limits->slew_ns ==>
                        \result == rr_held(limits, goal_ns);
*/
rr_ns rr_servo_step_ns(const struct rr_servo_limits *limits, rr_ns pulse_ns, rr_ns goal_ns);

#endif
