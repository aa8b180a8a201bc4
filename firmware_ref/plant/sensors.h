/* What the board sees of an axis: encoder counts and motor current, each with its faults; told in
 * `ramprig.mock.plant.sensors`. */
#ifndef RAMPRIG_PLANT_SENSORS_H
#define RAMPRIG_PLANT_SENSORS_H

#include "parameters.h"
#include "twister.h"

#define PLANT_NOISE_TABLE 4096

struct plant_encoder {
    bool phases_swapped; /* counts the wrong way */
    bool dead;           /* the count is frozen */
    bool one_channel;    /* phase A alone: to and fro by one */
    bool noisy;          /* each reading moved by -1, 0 or +1 */
    uint32_t count;      /* two's complement */
    int64_t position;
    double counts_per_rad;
    struct twister random;
};

struct plant_current_sensor {
    double offset_ma;
    double noise_ma;
    double range_ma; /* a multiple of the step */
    double step_ma;
    struct twister random;
    double noise[PLANT_NOISE_TABLE]; /* Gaussian, 1 sigma = 1 */
};

void plant_encoder_start(struct plant_encoder *encoder, const struct plant_encoder_parameters *parameters, uint64_t seed);
int32_t plant_encoder_read(struct plant_encoder *encoder, double angle_rad);

void plant_current_sensor_start(struct plant_current_sensor *sensor, const struct plant_sensor_parameters *parameters,
                                uint64_t seed);
int32_t plant_current_sensor_read(struct plant_current_sensor *sensor, double current_a);

#endif
