/* A hobby servo; told in `ramprig.mock.plant.servo`. */
#ifndef RAMPRIG_PLANT_SERVO_H
#define RAMPRIG_PLANT_SERVO_H

#include "parameters.h"

struct plant_servo {
    const struct plant_servo_parameters *parameters;
    double angle_deg;
    double current_a;
    bool busy;
    double pulse_us; /* 0 = none */
    double goal_deg;
    double degrees_per_tick;
};

void plant_servo_start(struct plant_servo *servo, const struct plant_servo_parameters *parameters, uint32_t tick_us);

/* Gives it a pulse in each frame, or none with 0. */
void plant_servo_set_pulse(struct plant_servo *servo, double pulse_us);

/* One tick; does nothing once `busy` is false. */
void plant_servo_step(struct plant_servo *servo);

#endif
