/* Encoder and current sensor; see sensors.h. */
#include "sensors.h"

#include <math.h>

#define TAU 6.283185307179586

/* Phase A in the states that follow each other counting up. */
static int64_t phase_a(int64_t position)
{
    int64_t state = position & 3;
    return state == 1 || state == 2 ? 1 : 0;
}

void plant_encoder_start(struct plant_encoder *encoder, const struct plant_encoder_parameters *parameters, uint64_t seed)
{
    encoder->phases_swapped = false;
    encoder->dead = false;
    encoder->one_channel = false;
    encoder->noisy = false;
    encoder->count = 0;
    encoder->position = 0;
    encoder->counts_per_rad = 4.0 * parameters->lines / TAU;
    twister_seed(&encoder->random, seed);
}

int32_t plant_encoder_read(struct plant_encoder *encoder, double angle_rad)
{
    int64_t position = (int64_t)floor(angle_rad * encoder->counts_per_rad);
    if (position != encoder->position) {
        int64_t moved = position - encoder->position;
        if (encoder->dead) {
            moved = 0;
        } else if (encoder->one_channel) {
            moved = phase_a(position) - phase_a(encoder->position);
        }
        encoder->position = position;
        encoder->count += (uint32_t)(uint64_t)(encoder->phases_swapped ? -moved : moved);
    }
    uint32_t jitter = encoder->noisy ? (uint32_t)(int32_t)twister_jitter(&encoder->random) : 0;
    return (int32_t)(encoder->count + jitter);
}

void plant_current_sensor_start(struct plant_current_sensor *sensor, const struct plant_sensor_parameters *parameters,
                                uint64_t seed)
{
    sensor->offset_ma = parameters->offset_ma;
    sensor->noise_ma = parameters->noise_ma;
    sensor->step_ma = parameters->step_ma;
    sensor->range_ma = floor(parameters->range_ma / parameters->step_ma) * parameters->step_ma;
    twister_seed(&sensor->random, seed);
    twister_gauss(&sensor->random, sensor->noise, PLANT_NOISE_TABLE);
}

int32_t plant_current_sensor_read(struct plant_current_sensor *sensor, double current_a)
{
    double reading = current_a * 1000.0 + sensor->offset_ma;
    if (sensor->noise_ma > 0.0) {
        reading += sensor->noise_ma * sensor->noise[twister_bits(&sensor->random, 12)];
    }
    if (reading > sensor->range_ma) {
        reading = sensor->range_ma;
    } else if (reading < -sensor->range_ma) {
        reading = -sensor->range_ma;
    }
    return (int32_t)(sensor->step_ma * floor(reading / sensor->step_ma + 0.5));
}
