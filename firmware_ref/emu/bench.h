/* What is at the chip's pins: the plant, or inputs by a script; see chip.h for the licence. */
#ifndef EMU_BENCH_H
#define EMU_BENCH_H

#include "chip.h"

#include "../plant/plant.h"

#define BENCH_STEP_US 100u /* the plant's step, and how finely a script's shaft is followed */

enum bench_kind { BENCH_PLANT, BENCH_SCRIPT };

struct bench {
    struct chip *chip;
    enum bench_kind kind;
    struct plant plant;
    bool lost_encoder; /* its wires are off: nothing changes at the pins */
    uint32_t counts;   /* at the pins */
    int64_t target_micro; /* where the script's shaft is, in millionths of a count */
    int64_t rate_micro;   /* millionths of a count a step */
    uint32_t target;      /* where the pins are to be by the next step */
    int32_t current_ma;   /* of the script */
    uint32_t supply_mv;
    uint64_t worst_off_cycles; /* from the last `bench_mark` until the bridge was off */
    uint64_t mark_cycle;
    bool marked;
    bool was_driven_twice; /* both bridge inputs on PWM at once: must never be */
};

/* Starts with a plant of one axis and at most as many servos as the chip drives. False where it has others, or cannot be. */
bool bench_begin(struct bench *bench, struct chip *chip, const struct plant_parameters *parameters, uint64_t seed);

/* A script's shaft turns at so many counts a second from now on; its current and supply are these. */
void bench_script(struct bench *bench, int32_t counts_per_s, int32_t current_ma, uint32_t supply_mv);

/* Goes on after a reset of the chip, which has wiped its timers. */
void bench_after_reset(struct bench *bench);

/* Notes the time; the next time the bridge is found off, what has passed is in `worst_off_cycles`. */
void bench_mark(struct bench *bench);

#endif
