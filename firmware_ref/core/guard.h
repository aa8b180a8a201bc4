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

/*@ predicate rr_guard_limits_ok(struct rr_guard_limits *l) =
      1 <= l->trip_ma <= 130000 && 1 <= l->trip_ticks <= 1000 && l->gain < 0x1000000 &&
      0 <= l->stall_duty <= RR_DUTY_FULL && 1 <= l->stall_counts <= 10000 && 1 <= l->stall_ticks <= 60000 &&
      1 <= l->wrong_counts <= 100000 && 0 <= l->speed_counts <= 1000000 && -1 <= l->sense <= 1;

    logic integer rr_amount(integer value) = value < 0 ? -value : value;
    logic integer rr_counted(integer ticks) = ticks >= 65535 ? 65535 : ticks + 1;
    logic integer rr_sign(integer duty) = duty > 0 ? 1 : duty < 0 ? -1 : 0;

    // the counts' way from a mark, over the wrap; the least is held where it can be negated
    logic integer rr_wrapped_way(integer counts, integer mark) = (int32_t)(uint32_t)((uint32_t)counts - (uint32_t)mark);
    logic integer rr_way(integer counts, integer mark) =
      rr_wrapped_way(counts, mark) == INT32_MIN ? -INT32_MAX : rr_wrapped_way(counts, mark);

    // the trip held after another was found: the lowest number (TRIP-1)
    logic integer rr_noted(integer held, integer trip) = held == RR_TRIP_NONE || trip < held ? trip : held;

    // TRIP-5 and TRIP-6: the duty pushes, and where motion is judged from in this tick
    predicate rr_pushes(struct rr_guard_limits *l, integer duty) = 0 < l->stall_duty <= rr_amount(duty);
    logic integer rr_stall_mark(struct rr_guard *g, integer counts) = g->pushing ? g->stall_mark : counts;
    logic integer rr_furthest(struct rr_guard *g, integer duty, integer counts) =
      g->pushing && g->push_sign == rr_sign(duty) ? g->furthest : counts;
    // forwards is along the duty, where neither its sign nor the sense is 0
    logic integer rr_forwards(integer way, integer push_sign, integer sense) = push_sign == sense ? way : -way;
    logic integer rr_along(struct rr_guard *g, struct rr_guard_limits *l, integer duty, integer counts) =
      rr_forwards(rr_way(counts, rr_furthest(g, duty, counts)), rr_sign(duty), l->sense);

    // What a guard finds: of overcurrent, stall and overload as the tick has left it, of the others as the tick met it.
    predicate rr_finds_overcurrent(struct rr_guard *g, struct rr_guard_limits *l) = g->over_for >= l->trip_ticks;
    predicate rr_finds_stall(struct rr_guard *g, struct rr_guard_limits *l, integer duty) =
      rr_pushes(l, duty) && l->sense != 0 && g->stall_for >= l->stall_ticks;
    predicate rr_finds_wrong_way(struct rr_guard *g, struct rr_guard_limits *l, integer duty, integer counts) =
      rr_pushes(l, duty) && l->sense != 0 && rr_along(g, l, duty, counts) <= -l->wrong_counts;
    predicate rr_finds_overspeed(struct rr_guard *g, struct rr_guard_limits *l, integer tick, integer counts) =
      tick % RR_SPEED_TICKS == 0 && 0 < l->speed_counts < rr_amount(rr_way(counts, g->window_mark));
    predicate rr_finds_overload(struct rr_guard *g, struct rr_guard_limits *l, integer tick) =
      tick % RR_THERMAL_TICKS == 0 && l->rated_ma > 0 && g->heat.level >= l->rated_ma * l->rated_ma;
*/

/* Judges one tick. `duty` is the bridge's in the last tick. Keeps the finding of lowest number, an earlier one on a tie. */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires rr_guard_limits_ok(limits) && -RR_DUTY_FULL <= duty <= RR_DUTY_FULL;
    requires finding->trip == RR_TRIP_NONE;
    assigns *guard, *finding;
    ensures TRIP_3: rr_finds_overcurrent(guard, limits) ==> RR_TRIP_NONE < finding->trip <= RR_TRIP_OVERCURRENT;
    ensures TRIP_5: rr_finds_stall(guard, limits, duty) ==> RR_TRIP_NONE < finding->trip <= RR_TRIP_STALL;
    ensures TRIP_6: \old(rr_finds_wrong_way(guard, limits, duty, counts)) ==>
                    RR_TRIP_NONE < finding->trip <= RR_TRIP_WRONG_WAY;
    ensures TRIP_7: \old(rr_finds_overspeed(guard, limits, tick, counts)) ==>
                    RR_TRIP_NONE < finding->trip <= RR_TRIP_OVERSPEED;
    ensures TRIP_8: rr_finds_overload(guard, limits, tick) ==> RR_TRIP_NONE < finding->trip <= RR_TRIP_OVERLOAD;
    ensures nothing_else: finding->trip == RR_TRIP_NONE || finding->trip == RR_TRIP_OVERCURRENT ||
                          RR_TRIP_WRONG_WAY <= finding->trip <= RR_TRIP_OVERLOAD;
    ensures TRIP_3_not_before: finding->trip == RR_TRIP_OVERCURRENT ==> rr_finds_overcurrent(guard, limits);
    ensures TRIP_5_not_before: finding->trip == RR_TRIP_STALL ==> rr_finds_stall(guard, limits, duty);
    ensures TRIP_6_not_before: finding->trip == RR_TRIP_WRONG_WAY ==>
                               \old(rr_finds_wrong_way(guard, limits, duty, counts));
    ensures TRIP_7_not_before: finding->trip == RR_TRIP_OVERSPEED ==>
                               \old(rr_finds_overspeed(guard, limits, tick, counts));
    ensures TRIP_8_not_before: finding->trip == RR_TRIP_OVERLOAD ==> rr_finds_overload(guard, limits, tick);
    ensures TRIP_3_count: guard->over_for ==
      (rr_amount(current_ma) > limits->trip_ma ? rr_counted(\old(guard->over_for)) : 0);
    ensures TRIP_5_count: rr_pushes(limits, duty) && limits->sense != 0 ==> guard->stall_for ==
      (rr_amount(rr_way(counts, \old(rr_stall_mark(guard, counts)))) >= limits->stall_counts
         ? 1 : rr_counted(\old(guard->stall_for)));
    ensures TRIP_5_zeroed: !rr_pushes(limits, duty) ==> guard->stall_for == 0;
*/
void rr_guard_step(struct rr_guard *guard, const struct rr_guard_limits *limits, uint32_t tick, int16_t duty,
                   int32_t counts, int32_t current_ma, struct rr_finding *finding);

/* Does the cause of this trip persist (SPEC CLEAR-1)? */
/*@ requires \valid_read(guard) && \valid_read(limits) && rr_guard_limits_ok(limits);
    assigns \nothing;
    ensures CLEAR_1: \result <==>
      (trip == RR_TRIP_OVERCURRENT && rr_amount(current_ma) > limits->trip_ma) ||
      (trip == RR_TRIP_OVERLOAD && limits->rated_ma > 0 &&
       8 * guard->heat.level > 7 * (limits->rated_ma * limits->rated_ma));
*/
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
