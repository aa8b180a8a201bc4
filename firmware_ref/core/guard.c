/* The guard of one axis; see guard.h. */
#include "guard.h"

#include "seeded.h"

/*@ requires \valid(finding);
    assigns *finding;
    ensures finding->trip == (\old(finding->trip) == RR_TRIP_NONE || trip < \old(finding->trip) ? trip
                                                                                              : \old(finding->trip)); */
RR_SHARED void rr_finding_note(struct rr_finding *finding, uint8_t trip, int32_t value, int32_t bound)
{
    if (finding->trip == RR_TRIP_NONE || trip < finding->trip) {
        finding->trip = trip;
        finding->value = value;
        finding->bound = bound;
    }
}

/* Of counts (SPEC section 2): can be negated. */
RR_SHARED static int32_t difference(int32_t a, int32_t b)
{
    int32_t away = (int32_t)((uint32_t)a - (uint32_t)b);
    return away == INT32_MIN ? -INT32_MAX : away;
}

/*@ assigns \nothing;
    ensures \result == (value < 0 ? -value : value); */
RR_SHARED static uint32_t size_of(int32_t value)
{
    return value < 0 ? (uint32_t)-(value + 1) + 1u : (uint32_t)value; /* the least has no negative */
}

/* floor(floor(a / b) / c) is floor(a / (b c)): the large division is done by the compiler. */
uint32_t rr_guard_gain(uint16_t thermal_s)
{
    return (uint32_t)((((uint64_t)RR_THERMAL_TICKS * RR_TICK_US) << 24) / 1000000ul) / thermal_s;
}

/* TRIP-3 */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires 1 <= limits->trip_ma <= 130000 && 1 <= limits->trip_ticks <= 1000;
    assigns guard->over_for, *finding;
    behavior too_much:
      assumes current_ma > limits->trip_ma || current_ma < -limits->trip_ma;
      ensures TRIP_3_count: guard->over_for == (\old(guard->over_for) == 65535 ? 65535 : \old(guard->over_for) + 1);
      ensures TRIP_3_found: guard->over_for >= limits->trip_ticks ==>
                            finding->trip != RR_TRIP_NONE && finding->trip <= RR_TRIP_OVERCURRENT;
      ensures TRIP_3_not_before: guard->over_for < limits->trip_ticks ==> finding->trip == \old(finding->trip);
    behavior enough:
      assumes -limits->trip_ma <= current_ma <= limits->trip_ma;
      ensures TRIP_3_count: guard->over_for == 0;
      ensures TRIP_3_not_before: finding->trip == \old(finding->trip);
    complete behaviors;
    disjoint behaviors;
*/
static void judge_current(struct rr_guard *guard, const struct rr_guard_limits *limits, int32_t current_ma,
                          struct rr_finding *finding)
{
    if (size_of(current_ma) <= (uint32_t)limits->trip_ma) {
        guard->over_for = 0;
        return;
    }
    uint16_t enough = RR_SEEDED(OVERCURRENT_LATE, (uint16_t)(limits->trip_ticks + 1u), limits->trip_ticks);
    if (guard->over_for < UINT16_MAX) { /* counted on, not held at `enough`: that limit may be raised meanwhile */
        guard->over_for++;
    }
    if (guard->over_for >= enough) {
        rr_finding_note(finding, RR_TRIP_OVERCURRENT, current_ma, limits->trip_ma);
    }
}

/* TRIP-5 and TRIP-6: what the counts do while the duty pushes. */
static void judge_motion(struct rr_guard *guard, const struct rr_guard_limits *limits, int16_t duty, int32_t counts,
                         struct rr_finding *finding)
{
    bool pushing = limits->stall_duty > 0 && size_of(duty) >= (uint32_t)limits->stall_duty;
    int8_t sign = (int8_t)((duty > 0) - (duty < 0));
    if (!pushing) {
        guard->pushing = false;
        guard->stall_for = 0;
        return;
    }
    if (!guard->pushing) {
        guard->stall_mark = counts;
    }
    if (!guard->pushing || sign != guard->push_sign) {
        guard->furthest = counts;
    }
    guard->pushing = true;
    guard->push_sign = sign;
    if (limits->sense == 0) {
        return;
    }
    if (size_of(difference(counts, guard->stall_mark)) >= (uint32_t)limits->stall_counts) {
        guard->stall_mark = counts;
        guard->stall_for = 1; /* the tick in which it begins again is the first */
    } else if (guard->stall_for < UINT16_MAX) {
        guard->stall_for++;
    }
    int32_t along = difference(counts, guard->furthest);
    if (sign * limits->sense < 0) {
        along = (int32_t)(0ul - (uint32_t)along);
    }
    if (along > 0) {
        guard->furthest = counts;
    } else if (size_of(along) >= (uint32_t)limits->wrong_counts) {
        rr_finding_note(finding, RR_TRIP_WRONG_WAY, (int32_t)(0ul - (uint32_t)along), limits->wrong_counts);
    }
    if (guard->stall_for >= limits->stall_ticks) {
        rr_finding_note(finding, RR_TRIP_STALL, duty, limits->stall_ticks);
    }
}

/* TRIP-7 */
static void judge_speed(struct rr_guard *guard, const struct rr_guard_limits *limits, uint32_t tick, int32_t counts,
                        struct rr_finding *finding)
{
    if (tick % RR_SPEED_TICKS != 0) {
        return;
    }
    uint32_t moved = size_of(difference(counts, guard->window_mark));
    guard->window_mark = counts;
    if (limits->speed_counts > 0 && moved > (uint32_t)limits->speed_counts) {
        rr_finding_note(finding, RR_TRIP_OVERSPEED, (int32_t)moved, limits->speed_counts);
    }
}

/* TRIP-8 */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires limits->gain < 0x1000000;
    assigns guard->heat, *finding;
*/
static void judge_heat(struct rr_guard *guard, const struct rr_guard_limits *limits, uint32_t tick, int32_t current_ma,
                       struct rr_finding *finding)
{
    rr_heat_take(&guard->heat, size_of(current_ma));
    if (tick % RR_THERMAL_TICKS != 0) {
        return;
    }
    rr_heat_step(&guard->heat, limits->gain);
    if (limits->rated_ma > 0 && guard->heat.level >= (uint32_t)limits->rated_ma * limits->rated_ma) {
        rr_finding_note(finding, RR_TRIP_OVERLOAD, rr_heat_root(guard->heat.level), limits->rated_ma);
    }
}

void rr_guard_step(struct rr_guard *guard, const struct rr_guard_limits *limits, uint32_t tick, int16_t duty,
                   int32_t counts, int32_t current_ma, struct rr_finding *finding)
{
    judge_current(guard, limits, current_ma, finding);
    judge_motion(guard, limits, duty, counts, finding);
    judge_speed(guard, limits, tick, counts, finding);
    judge_heat(guard, limits, tick, current_ma, finding);
}

bool rr_guard_persists(const struct rr_guard *guard, const struct rr_guard_limits *limits, uint8_t trip,
                       int32_t current_ma)
{
    if (trip == RR_TRIP_OVERCURRENT) {
        return size_of(current_ma) > (uint32_t)limits->trip_ma;
    }
    if (trip == RR_TRIP_OVERLOAD) { /* above 7/8 of the square */
        uint32_t full = (uint32_t)limits->rated_ma * limits->rated_ma;
        return full > 0 && guard->heat.level > full - ((full + 7u) >> 3);
    }
    return false;
}

_Static_assert((uint64_t)RR_THERMAL_TICKS * RR_TICK_US < 1000000ul, "TRIP-8: the gain is below 1");
