/* What a simulated bench is made of, in the names and units of `ramprig.mock.plant.parameters`, where each is explained.
 *
 * Each list gives name, how its bound is meant (ABOVE or LEAST) and the bound. What two values together must keep (a
 * break-away torque not below the running friction, end stops in order) is checked in Python, not here. */
#ifndef RAMPRIG_PLANT_PARAMETERS_H
#define RAMPRIG_PLANT_PARAMETERS_H

#include <stdbool.h>
#include <stdint.h>

#define PLANT_AXES_MAX   4
#define PLANT_SERVOS_MAX 4
#define PLANT_DUTY_FULL  10000

#define PLANT_MOTOR_LIST(X)              \
    X(resistance_20_ohm, ABOVE, 0.0)     \
    X(inductance_h, ABOVE, 0.0)          \
    X(constant_vs, ABOVE, 0.0)           \
    X(inertia_kgm2, ABOVE, 0.0)          \
    X(viscous_nms, LEAST, 0.0)           \
    X(coulomb_nm, LEAST, 0.0)            \
    X(static_nm, LEAST, 0.0)             \
    X(thermal_resistance_k_w, LEAST, 0.0) \
    X(thermal_time_s, ABOVE, 0.0)        \
    X(ambient_c, LEAST, -200.0)          \
    X(gear_ratio, ABOVE, 0.0)            \
    X(play_rad, LEAST, 0.0)              \
    X(output_friction_nm, LEAST, 0.0)

/* `on_output` is 0 or 1. */
#define PLANT_ENCODER_LIST(X) \
    X(lines, LEAST, 1.0)      \
    X(on_output, LEAST, 0.0)

#define PLANT_BRIDGE_LIST(X)       \
    X(resistance_ohm, LEAST, 0.0)  \
    X(freewheel_drop_v, LEAST, 0.0)

#define PLANT_SENSOR_LIST(X)    \
    X(offset_ma, LEAST, -1e9)   \
    X(noise_ma, LEAST, 0.0)     \
    X(range_ma, LEAST, 1.0)     \
    X(step_ma, LEAST, 1.0)

#define PLANT_SERVO_LIST(X)       \
    X(neutral_us, ABOVE, 0.0)     \
    X(us_per_deg, LEAST, -1e9)    \
    X(slew_deg_s, ABOVE, 0.0)     \
    X(dead_band_us, LEAST, 0.0)   \
    X(stop_low_deg, LEAST, -1e9)  \
    X(stop_high_deg, LEAST, -1e9) \
    X(idle_ma, LEAST, 0.0)        \
    X(moving_ma, LEAST, 0.0)      \
    X(stall_ma, LEAST, 0.0)

/* `ovp_v` and `current_limit_a` are infinite where the supply has none; `can_sink` is 0 or 1. */
#define PLANT_SUPPLY_LIST(X)        \
    X(volts, LEAST, 0.0)            \
    X(resistance_ohm, ABOVE, 0.0)   \
    X(capacitance_f, ABOVE, 0.0)    \
    X(can_sink, LEAST, 0.0)         \
    X(ovp_v, ABOVE, 0.0)            \
    X(current_limit_a, ABOVE, 0.0)  \
    X(standby_ma, LEAST, 0.0)

#define PLANT_FIELD(name, kind, bound) double name;
struct plant_motor_parameters { PLANT_MOTOR_LIST(PLANT_FIELD) };
struct plant_encoder_parameters { PLANT_ENCODER_LIST(PLANT_FIELD) };
struct plant_bridge_parameters { PLANT_BRIDGE_LIST(PLANT_FIELD) };
struct plant_sensor_parameters { PLANT_SENSOR_LIST(PLANT_FIELD) };
struct plant_servo_parameters { PLANT_SERVO_LIST(PLANT_FIELD) };
struct plant_supply_parameters { PLANT_SUPPLY_LIST(PLANT_FIELD) };
#undef PLANT_FIELD

struct plant_axis_parameters {
    struct plant_motor_parameters motor;
    struct plant_encoder_parameters encoder;
    struct plant_bridge_parameters bridge;
    struct plant_sensor_parameters sensor;
};

struct plant_parameters {
    struct plant_supply_parameters supply;
    struct plant_axis_parameters axis[PLANT_AXES_MAX];
    struct plant_servo_parameters servo[PLANT_SERVOS_MAX];
    uint8_t axes;
    uint8_t servos;
};

/* The vent drive's bench, as VENT_BENCH in Python: every figure is INVENTED. */
void plant_parameters_vent(struct plant_parameters *parameters);

/* Sets one by its name, as `supply.volts`, `axis.0.motor.inductance_h`, `servo.0.slew_deg_s`, `axes` or `servos`.
 * False for a name there is not, or a value beyond its bound or not a number; nothing is changed then. */
bool plant_parameters_set(struct plant_parameters *parameters, const char *name, double value);

/* The resistance of copper at a temperature as a multiple of that at 20 degC; never below 0.01. */
double plant_copper_factor(double celsius);

#endif
