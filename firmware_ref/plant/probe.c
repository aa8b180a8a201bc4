/* The plant alone as a shared library, for the tests that hold it against the Python form: drive, step and look. */
#include "plant.h"

#include <stdlib.h>

struct probe {
    struct plant_parameters parameters;
    struct plant plant;
};

struct probe *probe_new(void)
{
    struct probe *probe = malloc(sizeof *probe);
    if (probe != NULL) {
        plant_parameters_vent(&probe->parameters);
    }
    return probe;
}

void probe_free(struct probe *probe)
{
    free(probe);
}

int probe_parameter(struct probe *probe, const char *name, double value)
{
    return plant_parameters_set(&probe->parameters, name, value);
}

int probe_start(struct probe *probe, uint32_t tick_us, uint64_t seed)
{
    return plant_start(&probe->plant, &probe->parameters, tick_us, seed);
}

int probe_fault(struct probe *probe, const char *name, uint8_t axis, double amount)
{
    return plant_set_fault(&probe->plant, name, axis, amount);
}

void probe_load(struct probe *probe, uint8_t axis, double load_nm)
{
    plant_axis_set_load(&probe->plant.axis[axis], load_nm);
}

void probe_speed(struct probe *probe, uint8_t axis, double speed_rad_s)
{
    probe->plant.axis[axis].speed_rad_s = speed_rad_s;
}

void probe_stops(struct probe *probe, uint8_t axis, double low_rad, double high_rad)
{
    plant_axis_set_stops(&probe->plant.axis[axis], low_rad, high_rad);
}

void probe_hand(struct probe *probe, uint8_t axis, double radians)
{
    plant_axis_turn_by_hand(&probe->plant.axis[axis], radians);
}

double probe_output_rad(const struct probe *probe, uint8_t axis)
{
    return plant_axis_output_rad(&probe->plant.axis[axis]);
}

/* What has worn: friction, resistance, play. */
void probe_worn(const struct probe *probe, uint8_t axis, double *values)
{
    const struct plant_wear *worn = &probe->plant.axis[axis].worn;
    values[0] = worn->friction;
    values[1] = worn->resistance;
    values[2] = worn->play_rad;
}

void probe_drive(struct probe *probe, uint8_t axis, int32_t duty, int brake)
{
    probe->plant.axis[axis].duty = duty;
    probe->plant.axis[axis].brake = brake != 0;
}

void probe_pulse(struct probe *probe, uint8_t servo, double pulse_us)
{
    plant_servo_set_pulse(&probe->plant.servo[servo], pulse_us);
}

void probe_step(struct probe *probe, uint32_t ticks)
{
    for (uint32_t i = 0; i < ticks; i++) {
        plant_step(&probe->plant);
    }
}

/* What the board would read: counts and current. */
void probe_read(struct probe *probe, uint8_t axis, int32_t *readings)
{
    readings[0] = plant_read_counts(&probe->plant, axis);
    readings[1] = plant_read_current_ma(&probe->plant, axis);
}

/* Current, its mean, speed, angle and winding temperature of an axis. */
void probe_axis(const struct probe *probe, uint8_t axis, double *values)
{
    const struct plant_axis *a = &probe->plant.axis[axis];
    values[0] = a->current_a;
    values[1] = a->mean_a;
    values[2] = a->speed_rad_s;
    values[3] = a->angle_rad;
    values[4] = a->winding_c;
}

/* Bus voltage, the supply's current, and a servo's angle and current. */
void probe_bench(const struct probe *probe, uint8_t servo, double *values)
{
    values[0] = probe->plant.supply.bus_v;
    values[1] = probe->plant.supply.current_a;
    values[2] = probe->plant.servo[servo].angle_deg;
    values[3] = probe->plant.servo[servo].current_a;
}

int probe_supply_mv(const struct probe *probe)
{
    return plant_read_supply_mv(&probe->plant);
}

int probe_temperature_dc(const struct probe *probe, uint8_t axis)
{
    return plant_read_temperature_dc(&probe->plant, axis);
}
