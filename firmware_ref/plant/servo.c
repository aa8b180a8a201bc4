/* A hobby servo; see servo.h. */
#include "servo.h"

#include <math.h>

static double held(const struct plant_servo_parameters *parameters, double angle_deg)
{
    if (angle_deg < parameters->stop_low_deg) {
        return parameters->stop_low_deg;
    }
    return angle_deg > parameters->stop_high_deg ? parameters->stop_high_deg : angle_deg;
}

void plant_servo_start(struct plant_servo *servo, const struct plant_servo_parameters *parameters, uint32_t tick_us)
{
    servo->parameters = parameters;
    servo->degrees_per_tick = parameters->slew_deg_s * tick_us * 1e-6;
    servo->pulse_us = 0.0;
    servo->goal_deg = 0.0;
    servo->angle_deg = held(parameters, 0.0);
    servo->busy = false;
    servo->current_a = 0.0;
}

static bool has_pulse(const struct plant_servo *servo)
{
    return servo->pulse_us > 0.0;
}

void plant_servo_set_pulse(struct plant_servo *servo, double pulse_us)
{
    if (!(pulse_us < servo->pulse_us || pulse_us > servo->pulse_us)) {
        return;
    }
    servo->pulse_us = pulse_us;
    servo->busy = true;
    if (!has_pulse(servo)) {
        servo->goal_deg = servo->angle_deg;
        return;
    }
    const struct plant_servo_parameters *parameters = servo->parameters;
    double goal_deg = (pulse_us - parameters->neutral_us) / parameters->us_per_deg;
    /* The dead band is about the angle it holds; once it moves, it goes all the way. */
    if (fabs(goal_deg - servo->goal_deg) * fabs(parameters->us_per_deg) >= parameters->dead_band_us) {
        servo->goal_deg = goal_deg;
    }
}

void plant_servo_step(struct plant_servo *servo)
{
    if (!servo->busy) {
        return;
    }
    const struct plant_servo_parameters *parameters = servo->parameters;
    double away_deg = servo->goal_deg - servo->angle_deg;
    double move_deg = servo->degrees_per_tick;
    double angle_deg;
    if (fabs(away_deg) <= move_deg) {
        angle_deg = servo->goal_deg;
        servo->current_a = has_pulse(servo) ? parameters->idle_ma / 1000.0 : 0.0;
        servo->busy = false;
    } else {
        angle_deg = servo->angle_deg + (away_deg > 0.0 ? move_deg : -move_deg);
        servo->current_a = parameters->moving_ma / 1000.0;
    }
    servo->angle_deg = held(parameters, angle_deg);
    if (servo->angle_deg < angle_deg || servo->angle_deg > angle_deg) {
        servo->current_a = parameters->stall_ma / 1000.0;
        servo->busy = false;
    }
}
