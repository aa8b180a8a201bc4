/* The guard of one axis: the trips that follow from its current, counts and duty (SPEC TRIP-3, TRIP-5 to TRIP-8).
 *
 * Pure step functions over integers. The guard runs in every tick of every state; whether a finding latches is the
 * device's to say (TRIP-1). */
#ifndef RAMPRIG_GUARD_H
#define RAMPRIG_GUARD_H

#include "config.h"
#include "heat.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_guard_limits {
    int16_t offset_ma; /* taken off every reading before it is judged */
    int32_t trip_ma;
    uint16_t trip_ticks;
    uint16_t rated_ma;
    uint16_t thermal_s;
    uint32_t gain; /* from thermal_s: floor(THERMAL_TICKS tick_us 2^24 / (thermal_s 10^6)) */
    int16_t stall_duty;
    int16_t stall_counts;
    uint16_t stall_ticks;
    int32_t wrong_counts;
    int32_t speed_counts;
    int8_t sense;
};

struct rr_guard {
    uint16_t over_for;    /* ticks in a row above trip_ma */
    uint16_t stall_for;   /* ticks of duty without motion */
    int32_t stall_mark;   /* counts from which motion is judged */
    bool pushing;         /* the duty was at stall_duty or more in the last tick */
    int8_t push_sign;     /* its sign */
    int32_t furthest;     /* counts furthest along the duty */
    int32_t window_mark;  /* counts at the last tick divisible by SPEED_TICKS */
    struct rr_heat heat;
};

/* A finding: trip, value and bound as in the notice. `trip` is RR_TRIP_NONE where there is none. */
struct rr_finding {
    uint8_t trip;
    uint8_t index;
    int32_t value;
    int32_t bound;
};

/* Judges one tick. `duty` is the bridge's in the last tick. Keeps the finding of lowest number, an earlier one on a tie. */
void rr_guard_step(struct rr_guard *guard, const struct rr_guard_limits *limits, uint32_t tick, int16_t duty,
                   int32_t counts, int32_t current_ma, struct rr_finding *finding);

/* Does the cause of this trip persist (SPEC CLEAR-1)? */
bool rr_guard_persists(const struct rr_guard *guard, const struct rr_guard_limits *limits, uint8_t trip,
                       int32_t current_ma);

/* The gain of the thermal model for a time constant in s. */
/*@ requires 1 <= thermal_s;
    assigns \nothing;
*/
uint32_t rr_guard_gain(uint16_t thermal_s);

/* Notes a finding if its trip has a lower number than the one held. */
void rr_finding_note(struct rr_finding *finding, uint8_t trip, int32_t value, int32_t bound);

#endif
