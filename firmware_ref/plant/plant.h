/* The plant in C: supply, H-bridges, brushed motors, encoders, current sensors and hobby servos, stepped together.
 *
 * The equations, their sources and the parameters are told once, in `ramprig.mock.plant` and its modules; each file here
 * is the C form of the module of its name, and `tests/test_firmware_plant.py` holds the two against each other. Double
 * precision, no heap: the caller owns the memory, and must not move it after `plant_start`.
 *
 * Set `axis[n].duty`, `axis[n].brake` and `plant_servo_set_pulse`, call `plant_step` once a tick, and read the sensors.
 * The same seed, drive and order of readings give the same readings as the Python form. To be built without contraction
 * of products and sums (-ffp-contract=off). */
#ifndef RAMPRIG_PLANT_H
#define RAMPRIG_PLANT_H

#include "axis.h"
#include "parameters.h"
#include "sensors.h"
#include "servo.h"
#include "supply.h"

struct plant {
    struct plant_parameters parameters;
    struct plant_supply supply;
    struct plant_axis axis[PLANT_AXES_MAX];
    struct plant_servo servo[PLANT_SERVOS_MAX];
    struct plant_encoder encoder[PLANT_AXES_MAX];
    struct plant_current_sensor sensor[PLANT_AXES_MAX];
    uint8_t wired_to[PLANT_AXES_MAX]; /* the axis whose encoder is plugged in where that of axis n belongs */
    uint32_t warm_ticks;
    uint32_t to_warm;
};

/* Makes the bench, all at rest; the parameters are copied. False where a motor is beyond simulation. */
bool plant_start(struct plant *plant, const struct plant_parameters *parameters, uint32_t tick_us, uint64_t seed);

/* Advances everything one tick. */
void plant_step(struct plant *plant);

/* The encoder counter: counts (x4) of the shaft that it sits on, wrapping. */
int32_t plant_read_counts(struct plant *plant, uint8_t axis);

/* The signed motor current as sensed at the bridge. Noise is drawn at each reading. */
int32_t plant_read_current_ma(struct plant *plant, uint8_t axis);
int32_t plant_read_supply_mv(const struct plant *plant);
int16_t plant_read_temperature_dc(const struct plant *plant, uint8_t axis);

/* Switches a fault of the plant by the mock's name for it (`jammed_shaft`, `current_offset`, ...); 0 is off. False for a
 * name that is none of the plant's. */
bool plant_set_fault(struct plant *plant, const char *name, uint8_t axis, double amount);

#endif
