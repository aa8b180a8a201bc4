/* What a simulated bench is made of; see parameters.h. */
#include "parameters.h"

#include "vent_bench.h"

#include <math.h>
#include <stddef.h>
#include <string.h>

#define COPPER_PER_K 0.00393 /* at 20 degC (IEC 60028, from memory; NBS Handbook 100 agrees) */

enum bound_kind { ABOVE, LEAST };

struct field {
    const char *name;
    size_t offset;
    double bound;
    enum bound_kind kind;
};

#define FIELD(owner, name, kind, bound) {#name, offsetof(struct owner, name), bound, kind},
#define MOTOR(name, kind, bound)        FIELD(plant_motor_parameters, name, kind, bound)
#define ENCODER(name, kind, bound)      FIELD(plant_encoder_parameters, name, kind, bound)
#define BRIDGE(name, kind, bound)       FIELD(plant_bridge_parameters, name, kind, bound)
#define SENSOR(name, kind, bound)       FIELD(plant_sensor_parameters, name, kind, bound)
#define SERVO(name, kind, bound)        FIELD(plant_servo_parameters, name, kind, bound)
#define SUPPLY(name, kind, bound)       FIELD(plant_supply_parameters, name, kind, bound)

static const struct field motor_fields[] = {PLANT_MOTOR_LIST(MOTOR){NULL, 0, 0.0, LEAST}};
static const struct field encoder_fields[] = {PLANT_ENCODER_LIST(ENCODER){NULL, 0, 0.0, LEAST}};
static const struct field bridge_fields[] = {PLANT_BRIDGE_LIST(BRIDGE){NULL, 0, 0.0, LEAST}};
static const struct field sensor_fields[] = {PLANT_SENSOR_LIST(SENSOR){NULL, 0, 0.0, LEAST}};
static const struct field servo_fields[] = {PLANT_SERVO_LIST(SERVO){NULL, 0, 0.0, LEAST}};
static const struct field supply_fields[] = {PLANT_SUPPLY_LIST(SUPPLY){NULL, 0, 0.0, LEAST}};

double plant_copper_factor(double celsius)
{
    double factor = 1.0 + COPPER_PER_K * (celsius - 20.0);
    return factor > 0.01 ? factor : 0.01;
}

static bool set_field(const struct field *fields, void *owner, const char *name, double value)
{
    for (const struct field *field = fields; field->name != NULL; field++) {
        if (strcmp(field->name, name) == 0) {
            bool inside = field->kind == ABOVE ? value > field->bound : value >= field->bound;
            if (inside) {
                memcpy((char *)owner + field->offset, &value, sizeof value);
            }
            return inside;
        }
    }
    return false;
}

/* What follows `prefix` in the name, or NULL where it begins otherwise. */
static const char *after(const char *name, const char *prefix)
{
    size_t length = strlen(prefix);
    return strncmp(name, prefix, length) == 0 ? name + length : NULL;
}

/* What follows `N.`, with N by `index`, or NULL. */
static const char *after_index(const char *name, uint8_t many, uint8_t *index)
{
    if (name[0] < '0' || name[0] >= '0' + many || name[1] != '.') {
        return NULL;
    }
    *index = (uint8_t)(name[0] - '0');
    return name + 2;
}

static bool set_axis(struct plant_axis_parameters *axis, const char *name, double value)
{
    const char *rest;
    if ((rest = after(name, "motor.")) != NULL) {
        return set_field(motor_fields, &axis->motor, rest, value);
    }
    if ((rest = after(name, "encoder.")) != NULL) {
        return set_field(encoder_fields, &axis->encoder, rest, value);
    }
    if ((rest = after(name, "bridge.")) != NULL) {
        return set_field(bridge_fields, &axis->bridge, rest, value);
    }
    rest = after(name, "sensor.");
    return rest != NULL && set_field(sensor_fields, &axis->sensor, rest, value);
}

static bool set_count(uint8_t *count, uint8_t most, double value)
{
    if (!(value >= 0.0 && value <= most)) {
        return false;
    }
    *count = (uint8_t)value;
    return true;
}

bool plant_parameters_set(struct plant_parameters *parameters, const char *name, double value)
{
    const char *rest;
    uint8_t index = 0;
    if (strcmp(name, "axes") == 0) {
        return set_count(&parameters->axes, PLANT_AXES_MAX, value);
    }
    if (strcmp(name, "servos") == 0) {
        return set_count(&parameters->servos, PLANT_SERVOS_MAX, value);
    }
    if ((rest = after(name, "supply.")) != NULL) {
        return set_field(supply_fields, &parameters->supply, rest, value);
    }
    if ((rest = after(name, "axis.")) != NULL && (rest = after_index(rest, PLANT_AXES_MAX, &index)) != NULL) {
        return set_axis(&parameters->axis[index], rest, value);
    }
    if ((rest = after(name, "servo.")) != NULL && (rest = after_index(rest, PLANT_SERVOS_MAX, &index)) != NULL) {
        return set_field(servo_fields, &parameters->servo[index], rest, value);
    }
    return false;
}

void plant_parameters_vent(struct plant_parameters *parameters)
{
    memset(parameters, 0, sizeof *parameters);
#define SET(name, value) (void)plant_parameters_set(parameters, name, value);
    PLANT_VENT_LIST(SET)
#undef SET
}
