/* The guard of one axis; see guard.h. */
#include "guard.h"

#include "seeded.h"

/*@ requires \valid(finding);
    assigns *finding;
    ensures finding->trip == rr_noted(\old(finding->trip), trip);
    ensures \old(finding->trip) == RR_TRIP_NONE || trip < \old(finding->trip) ==>
            finding->value == value && finding->bound == bound; */
RR_APART void rr_finding_note(struct rr_finding *finding, uint8_t trip, int32_t value, int32_t bound)
{
    if (finding->trip == RR_TRIP_NONE || trip < finding->trip) {
        finding->trip = trip;
        finding->value = value;
        finding->bound = bound;
    }
}

/* Of counts (SPEC section 2): can be negated. */
/*@ assigns \nothing;
    ensures \result == rr_way(a, b) && \result > INT32_MIN; */
RR_APART static int32_t difference(int32_t a, int32_t b)
{
    int32_t away = (int32_t)((uint32_t)a - (uint32_t)b);
    return away == INT32_MIN ? -INT32_MAX : away;
}

/*@ assigns \nothing;
    ensures \result == rr_amount(value); */
RR_APART static uint32_t size_of(int32_t value)
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
    requires rr_guard_limits_ok(limits);
    assigns guard->over_for, *finding;
    ensures TRIP_3_count: guard->over_for ==
      (rr_amount(current_ma) > limits->trip_ma ? rr_counted(\old(guard->over_for)) : 0);
    ensures TRIP_3_found: rr_finds_overcurrent(guard, limits) ==>
      finding->trip == rr_noted(\old(finding->trip), RR_TRIP_OVERCURRENT);
    ensures TRIP_3_not_before: !rr_finds_overcurrent(guard, limits) ==> finding->trip == \old(finding->trip);
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

/* TRIP-5 and TRIP-6: does the duty push? Sets anew the marks from which motion is judged. */
/*@ requires \valid(guard) && \valid_read(limits) && \separated(guard, limits);
    requires rr_guard_limits_ok(limits) && -RR_DUTY_FULL <= duty <= RR_DUTY_FULL;
    assigns guard->pushing, guard->push_sign, guard->stall_for, guard->stall_mark, guard->furthest;
    ensures (\result <==> rr_pushes(limits, duty)) && (guard->pushing <==> rr_pushes(limits, duty));
    behavior idle:
      assumes !rr_pushes(limits, duty);
      ensures TRIP_5_zeroed: guard->stall_for == 0 && guard->push_sign == \old(guard->push_sign);
    behavior pushing:
      assumes rr_pushes(limits, duty);
      ensures guard->push_sign == rr_sign(duty) && guard->stall_for == \old(guard->stall_for);
      ensures guard->stall_mark == \old(rr_stall_mark(guard, counts));
      ensures guard->furthest == \old(rr_furthest(guard, duty, counts));
    complete behaviors;
    disjoint behaviors;
*/
static bool pushes(struct rr_guard *guard, const struct rr_guard_limits *limits, int16_t duty, int32_t counts)
{
    int8_t sign = (int8_t)((duty > 0) - (duty < 0));
    if (limits->stall_duty == 0 || size_of(duty) < (uint32_t)limits->stall_duty) {
        guard->pushing = false;
        guard->stall_for = 0;
        return false;
    }
    if (!guard->pushing) {
        guard->stall_mark = counts;
    }
    if (!guard->pushing || sign != guard->push_sign) {
        guard->furthest = counts;
    }
    guard->pushing = true;
    guard->push_sign = sign;
    return true;
}

/* TRIP-5, while the duty pushes. */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires rr_guard_limits_ok(limits);
    assigns guard->stall_for, guard->stall_mark, *finding;
    behavior moved:
      assumes rr_amount(rr_way(counts, guard->stall_mark)) >= limits->stall_counts;
      ensures TRIP_5_count: guard->stall_for == 1 && guard->stall_mark == counts;
    behavior stood:
      assumes rr_amount(rr_way(counts, guard->stall_mark)) < limits->stall_counts;
      ensures TRIP_5_count: guard->stall_for == rr_counted(\old(guard->stall_for));
      ensures TRIP_5_mark: guard->stall_mark == \old(guard->stall_mark);
    behavior found:
      ensures TRIP_5_found: guard->stall_for >= limits->stall_ticks ==>
        finding->trip == rr_noted(\old(finding->trip), RR_TRIP_STALL);
      ensures TRIP_5_not_before: guard->stall_for < limits->stall_ticks ==> finding->trip == \old(finding->trip);
    complete behaviors moved, stood;
    disjoint behaviors moved, stood;
*/
static void judge_stall(struct rr_guard *guard, const struct rr_guard_limits *limits, int16_t duty, int32_t counts,
                        struct rr_finding *finding)
{
    if (size_of(difference(counts, guard->stall_mark)) >= (uint32_t)limits->stall_counts) {
        guard->stall_mark = counts;
        guard->stall_for = 1; /* the tick in which it begins again is the first */
    } else if (guard->stall_for < UINT16_MAX) {
        guard->stall_for++;
    }
    if (guard->stall_for >= limits->stall_ticks) {
        rr_finding_note(finding, RR_TRIP_STALL, duty, limits->stall_ticks);
    }
}

/* TRIP-6, while the duty pushes. */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires rr_guard_limits_ok(limits);
    assigns guard->furthest, *finding;
    behavior ahead:
      assumes rr_forwards(rr_way(counts, guard->furthest), guard->push_sign, limits->sense) > 0;
      ensures TRIP_6_mark: guard->furthest == counts;
      ensures TRIP_6_not_before: finding->trip == \old(finding->trip);
    behavior back:
      assumes rr_forwards(rr_way(counts, guard->furthest), guard->push_sign, limits->sense) <= -limits->wrong_counts;
      ensures TRIP_6_mark: guard->furthest == \old(guard->furthest);
      ensures TRIP_6_found: finding->trip == rr_noted(\old(finding->trip), RR_TRIP_WRONG_WAY);
    behavior between:
      assumes -limits->wrong_counts < rr_forwards(rr_way(counts, guard->furthest), guard->push_sign, limits->sense) <= 0;
      ensures TRIP_6_mark: guard->furthest == \old(guard->furthest);
      ensures TRIP_6_not_before: finding->trip == \old(finding->trip);
    complete behaviors;
    disjoint behaviors;
*/
static void judge_way(struct rr_guard *guard, const struct rr_guard_limits *limits, int32_t counts,
                      struct rr_finding *finding)
{
    int32_t along = difference(counts, guard->furthest);
    if (guard->push_sign != limits->sense) { /* neither is 0 here */
        along = -along;
    }
    if (along > 0) {
        guard->furthest = counts;
    } else if (-along >= limits->wrong_counts) {
        rr_finding_note(finding, RR_TRIP_WRONG_WAY, -along, limits->wrong_counts);
    }
}

/* TRIP-5 and TRIP-6: what the counts do while the duty pushes. */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires rr_guard_limits_ok(limits) && -RR_DUTY_FULL <= duty <= RR_DUTY_FULL;
    assigns guard->pushing, guard->push_sign, guard->stall_for, guard->stall_mark, guard->furthest, *finding;
    ensures guard->pushing <==> rr_pushes(limits, duty);
    ensures guard->push_sign == (guard->pushing ? rr_sign(duty) : \old(guard->push_sign));
    behavior idle:
      assumes !rr_pushes(limits, duty);
      ensures TRIP_5_zeroed: guard->stall_for == 0;
      ensures finding->trip == \old(finding->trip);
    behavior blind:
      assumes rr_pushes(limits, duty) && limits->sense == 0;
      ensures finding->trip == \old(finding->trip);
    behavior judged:
      assumes rr_pushes(limits, duty) && limits->sense != 0;
      ensures TRIP_5_count: guard->stall_for ==
        (rr_amount(rr_way(counts, \old(rr_stall_mark(guard, counts)))) >= limits->stall_counts
           ? 1 : rr_counted(\old(guard->stall_for)));
      ensures TRIP_5_mark: guard->stall_mark ==
        (rr_amount(rr_way(counts, \old(rr_stall_mark(guard, counts)))) >= limits->stall_counts
           ? counts : \old(rr_stall_mark(guard, counts)));
      ensures TRIP_6_mark: guard->furthest ==
        (\old(rr_along(guard, limits, duty, counts)) > 0 ? counts : \old(rr_furthest(guard, duty, counts)));
      ensures TRIP_6_found: \old(rr_finds_wrong_way(guard, limits, duty, counts)) ==>
        finding->trip == rr_noted(\old(finding->trip), RR_TRIP_WRONG_WAY);
      ensures TRIP_5_found: !\old(rr_finds_wrong_way(guard, limits, duty, counts)) &&
        rr_finds_stall(guard, limits, duty) ==> finding->trip == rr_noted(\old(finding->trip), RR_TRIP_STALL);
      ensures not_before: !\old(rr_finds_wrong_way(guard, limits, duty, counts)) &&
        !rr_finds_stall(guard, limits, duty) ==> finding->trip == \old(finding->trip);
    complete behaviors;
    disjoint behaviors;
*/
static void judge_motion(struct rr_guard *guard, const struct rr_guard_limits *limits, int16_t duty, int32_t counts,
                         struct rr_finding *finding)
{
    if (pushes(guard, limits, duty, counts) && limits->sense != 0) {
        judge_way(guard, limits, counts, finding);
        judge_stall(guard, limits, duty, counts, finding);
    }
}

/* TRIP-7 */
/*@ requires \valid(guard) && \valid_read(limits) && \valid(finding) && \separated(guard, limits, finding);
    requires rr_guard_limits_ok(limits);
    assigns guard->window_mark, *finding;
    ensures TRIP_7_mark: guard->window_mark == (tick % RR_SPEED_TICKS == 0 ? counts : \old(guard->window_mark));
    ensures TRIP_7_found: \old(rr_finds_overspeed(guard, limits, tick, counts)) ==>
      finding->trip == rr_noted(\old(finding->trip), RR_TRIP_OVERSPEED);
    ensures TRIP_7_not_before: !\old(rr_finds_overspeed(guard, limits, tick, counts)) ==>
      finding->trip == \old(finding->trip);
*/
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
    ensures TRIP_8_found: rr_finds_overload(guard, limits, tick) ==>
      finding->trip == rr_noted(\old(finding->trip), RR_TRIP_OVERLOAD);
    ensures TRIP_8_not_before: !rr_finds_overload(guard, limits, tick) ==> finding->trip == \old(finding->trip);
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
    //@ assert finding->trip == RR_TRIP_NONE || finding->trip == RR_TRIP_OVERCURRENT;
    //@ assert finding->trip == RR_TRIP_OVERCURRENT <==> rr_finds_overcurrent(guard, limits);
    judge_motion(guard, limits, duty, counts, finding);
    judge_speed(guard, limits, tick, counts, finding);
    //@ assert \at(rr_finds_overspeed(guard, limits, tick, counts), Pre) ==> 0 < finding->trip <= RR_TRIP_OVERSPEED;
    //@ assert \at(rr_finds_wrong_way(guard, limits, duty, counts), Pre) ==> 0 < finding->trip <= RR_TRIP_WRONG_WAY;
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
        //@ assert full == limits->rated_ma * limits->rated_ma <= 0xFFFE0001;
        return full > 0 && guard->heat.level > full - (full + 7u) / 8u;
    }
    return false;
}

_Static_assert((uint64_t)RR_THERMAL_TICKS * RR_TICK_US < 1000000ul, "TRIP-8: the gain is below 1");
