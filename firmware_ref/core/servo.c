/* One servo's pulse in a tick; see servo.h. */
#include "servo.h"

#include "seeded.h"

RR_APART rr_ns rr_servo_held_ns(const struct rr_servo_limits *limits, rr_ns pulse_ns)
{
    if (pulse_ns < limits->least_ns) {
        return limits->least_ns;
    }
    return pulse_ns > limits->greatest_ns ? limits->greatest_ns : pulse_ns;
}

rr_ns rr_servo_first_ns(const struct rr_servo_limits *limits)
{
    return rr_servo_held_ns(limits, limits->home_ns);
}

uint16_t rr_servo_us(rr_ns pulse_ns)
{
    uint16_t us = (uint16_t)((RR_U24)pulse_ns / 1024u);
    us = (uint16_t)(us + us / 64u + us / 128u + us / 2048u); /* (1 + 1/64 + 1/128 + 1/2048) / 1024: a little below 1/1000 */
    uint16_t left = (uint16_t)((uint32_t)pulse_ns - (uint32_t)us * 1000u);
    /*@ loop invariant us * 1000 + left == pulse_ns && 0 <= us <= 4194;
        loop assigns left, us;
        loop variant left; */
    while (left >= 1000u) {
        left = (uint16_t)(left - 1000u);
        us++;
    }
    return us;
}

rr_ns rr_servo_step_ns(const struct rr_servo_limits *limits, rr_ns pulse_ns, rr_ns goal_ns)
{
    rr_ns goal = RR_SEEDED(SERVO_PAST_ITS_END, goal_ns, rr_servo_held_ns(limits, goal_ns));
    rr_ns pulse = rr_servo_held_ns(limits, pulse_ns); /* a limit tightened past the pulse cuts at once, like the ceiling */
    if (goal - pulse > limits->slew_ns) {
        return pulse + limits->slew_ns;
    }
    return pulse - goal > limits->slew_ns ? pulse - limits->slew_ns : goal;
}
