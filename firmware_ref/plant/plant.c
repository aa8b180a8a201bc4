/* The plant in C; see plant.h. */
#include "plant.h"

#include <math.h>
#include <string.h>

#define OPEN_OHM      10000.0 /* what a winding with an open lead has: far less flows than a sensor can tell */
#define WEAR_TURNS    1000.0  /* the wear faults are told for so many turns of the output */
#define PI            3.141592653589793
#define WARM_EVERY_US 50000u /* how often winding temperatures are brought up to date */

bool plant_start(struct plant *plant, const struct plant_parameters *parameters, uint32_t tick_us, uint64_t seed)
{
    plant->parameters = *parameters;
    plant_supply_start(&plant->supply, &plant->parameters.supply, tick_us);
    bool possible = true;
    for (uint8_t i = 0; i < parameters->axes; i++) {
        plant->wired_to[i] = i;
        possible = plant_axis_start(&plant->axis[i], &plant->parameters.axis[i], tick_us) && possible;
    }
    for (uint8_t i = 0; i < parameters->servos; i++) {
        plant_servo_start(&plant->servo[i], &plant->parameters.servo[i], tick_us);
    }
    /* A source of its own for each sensor: reading one axis more often leaves the others' noise as it was. */
    struct twister source;
    twister_seed(&source, seed);
    for (uint8_t i = 0; i < parameters->axes; i++) {
        plant_encoder_start(&plant->encoder[i], &plant->parameters.axis[i].encoder, twister_bits64(&source));
    }
    for (uint8_t i = 0; i < parameters->axes; i++) {
        plant_current_sensor_start(&plant->sensor[i], &plant->parameters.axis[i].sensor, twister_bits64(&source));
    }
    plant->warm_ticks = tick_us < WARM_EVERY_US ? WARM_EVERY_US / tick_us : 1;
    plant->to_warm = plant->warm_ticks;
    return possible;
}

static bool differs_from_zero(double value)
{
    return value < 0.0 || value > 0.0;
}

/* Nothing to do until a bridge is driven, a servo has a way to go or the bus has not yet settled. */
static bool at_rest(const struct plant *plant)
{
    for (uint8_t i = 0; i < plant->parameters.axes; i++) {
        const struct plant_axis *axis = &plant->axis[i];
        if (axis->duty != 0 || differs_from_zero(axis->speed_rad_s) || differs_from_zero(axis->current_a) ||
            axis->restless || differs_from_zero(axis->surplus_a)) {
            return false;
        }
    }
    for (uint8_t i = 0; i < plant->parameters.servos; i++) {
        if (plant->servo[i].busy) {
            return false;
        }
    }
    return plant->supply.settled;
}

void plant_step(struct plant *plant)
{
    if (--plant->to_warm == 0) {
        plant->to_warm = plant->warm_ticks;
        for (uint8_t i = 0; i < plant->parameters.axes; i++) {
            plant_axis_warm(&plant->axis[i], plant->warm_ticks);
        }
    }
    if (at_rest(plant)) {
        return;
    }
    double load_a = plant->supply.standby_a;
    double siemens = 0.0;
    for (uint8_t i = 0; i < plant->parameters.servos; i++) {
        plant_servo_step(&plant->servo[i]);
        load_a += plant->servo[i].current_a;
    }
    double bus_v = plant->supply.bus_v;
    for (uint8_t i = 0; i < plant->parameters.axes; i++) {
        struct plant_axis *axis = &plant->axis[i];
        load_a += axis->surplus_a;
        axis->surplus_a = 0.0;
        double ratio = plant_axis_prepare(axis, bus_v);
        if (differs_from_zero(ratio)) {
            load_a += ratio * axis->free_a;
            siemens += ratio * ratio * axis->siemens;
        }
    }
    bus_v = plant_supply_step(&plant->supply, load_a, siemens);
    for (uint8_t i = 0; i < plant->parameters.axes; i++) {
        plant_axis_advance(&plant->axis[i], bus_v);
        if (plant->axis[i].gear.linked) {
            plant_axis_follow(&plant->axis[i]);
        }
    }
}

int32_t plant_read_counts(struct plant *plant, uint8_t axis)
{
    const struct plant_axis *turned = &plant->axis[axis];
    bool on_output = plant->parameters.axis[axis].encoder.on_output > 0.0;
    return plant_encoder_read(&plant->encoder[axis], on_output ? plant_axis_output_rad(turned) : turned->angle_rad);
}

int32_t plant_read_current_ma(struct plant *plant, uint8_t axis)
{
    return plant_current_sensor_read(&plant->sensor[axis], plant_axis_bridge_current_a(&plant->axis[axis]));
}

int32_t plant_read_supply_mv(const struct plant *plant)
{
    return (int32_t)(plant->supply.bus_v * 1000.0 + 0.5);
}

int16_t plant_read_temperature_dc(const struct plant *plant, uint8_t axis)
{
    return (int16_t)rint(plant->axis[axis].winding_c * 10.0);
}

/* What wears and how much of it in WEAR_TURNS; false for a name that is none of these. */
static bool set_wear(struct plant_axis *axis, const char *name, double amount)
{
    struct plant_wear wear = axis->wear;
    if (strcmp(name, "friction_wear") == 0) {
        wear.friction = amount / 100.0 / WEAR_TURNS;
    } else if (strcmp(name, "resistance_wear") == 0) {
        wear.resistance = amount / 100.0 / WEAR_TURNS;
    } else if (strcmp(name, "play_wear") == 0) {
        wear.play_rad = amount * (PI / 180.0) / WEAR_TURNS;
    } else {
        return false;
    }
    plant_axis_set_wear(axis, wear);
    return true;
}

bool plant_set_fault(struct plant *plant, const char *name, uint8_t axis, double amount)
{
    bool on = differs_from_zero(amount);
    struct plant_encoder *encoder = &plant->encoder[axis];
    if (strcmp(name, "phases_swapped") == 0) {
        encoder->phases_swapped = on;
    } else if (strcmp(name, "encoder_dead") == 0) {
        encoder->dead = on;
    } else if (strcmp(name, "one_channel") == 0) {
        encoder->one_channel = on;
    } else if (strcmp(name, "noisy_counts") == 0) {
        encoder->noisy = on;
    } else if (strcmp(name, "leads_swapped") == 0) {
        plant_axis_set_leads_swapped(&plant->axis[axis], on);
    } else if (strcmp(name, "jammed_shaft") == 0) {
        plant_axis_set_jammed(&plant->axis[axis], on);
    } else if (strcmp(name, "current_offset") == 0) {
        plant->sensor[axis].offset_ma = plant->parameters.axis[axis].sensor.offset_ma + amount;
    } else if (strcmp(name, "lead_open") == 0) {
        double new_ohm = plant->parameters.axis[axis].motor.resistance_20_ohm;
        double usual_ohm = new_ohm * (1.0 + plant->axis[axis].worn.resistance);
        plant_axis_set_resistance(&plant->axis[axis], on ? OPEN_OHM : usual_ohm);
    } else if (strcmp(name, "encoders_exchanged") == 0) {
        for (uint8_t i = 0; i < plant->parameters.axes; i++) {
            plant->wired_to[i] = (uint8_t)((i + on) % plant->parameters.axes);
        }
    } else if (strcmp(name, "weak_supply") == 0) {
        plant_supply_set_resistance(&plant->supply,
                                    plant->parameters.supply.resistance_ohm * (on ? amount : 1.0));
    } else if (strcmp(name, "output_clamped") == 0) {
        plant_axis_set_clamped(&plant->axis[axis], on);
    } else if (strcmp(name, "gear_play") == 0) {
        double usual_rad = plant->parameters.axis[axis].motor.play_rad;
        double worn_rad = plant->axis[axis].worn.play_rad;
        plant_axis_set_play(&plant->axis[axis], (on ? amount * (PI / 180.0) : usual_rad) + worn_rad);
    } else {
        return set_wear(&plant->axis[axis], name, amount);
    }
    return true;
}
