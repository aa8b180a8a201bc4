/* The device's state and the latch of a trip: which state follows which (SPEC section 10, S5, TRIP-1, TRIP-2, STOP-5).
 *
 * Pure steps over one small struct. Whoever takes a step that ends in `off` or `tripped` turns the outputs off too. */
#ifndef RAMPRIG_LATCH_H
#define RAMPRIG_LATCH_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_latch {
    uint8_t state;       /* enum rr_state */
    uint8_t trip;        /* the latched one, or RR_TRIP_NONE */
    uint32_t stop_begun; /* tick in which the category 1 stop began */
};

/*@ predicate rr_latch_ok(struct rr_latch *l) =
      l->state <= RR_STATE_TRIPPED && l->trip < RR_TRIP_COUNT &&
      (l->state == RR_STATE_TRIPPED ==> l->trip != RR_TRIP_NONE) &&
      (l->state == RR_STATE_OFF || l->state == RR_STATE_ARMED ==> l->trip == RR_TRIP_NONE);

    predicate rr_live(integer state) = state == RR_STATE_ARMED || state == RR_STATE_STOPPING;

    // SPEC section 11: the trips that stop by category 1
    predicate rr_slow(integer trip) =
      trip == RR_TRIP_OVERLOAD || trip == RR_TRIP_LINK_LOST || trip == RR_TRIP_LATE_ORDER;

    // TRIP-1, TRIP-2: this trip latches in this state
    predicate rr_latches(integer state, integer trip) =
      rr_live(state) && (state == RR_STATE_STOPPING ==> !rr_slow(trip));
*/

/* Are the outputs enabled? */
/*@ requires \valid_read(latch);
    assigns \nothing;
    ensures \result <==> rr_live(latch->state);
*/
bool rr_latch_is_live(const struct rr_latch *latch);

/* The stop category of a trip. */
/*@ requires trip < RR_TRIP_COUNT;
    assigns \nothing;
    ensures (rr_slow(trip) ==> \result == 1) && (!rr_slow(trip) ==> \result == 0);
*/
uint8_t rr_latch_category(uint8_t trip);

/* `arm`, in state `off`. */
/*@ requires \valid(latch) && rr_latch_ok(latch) && latch->state == RR_STATE_OFF;
    assigns latch->state;
    ensures S5_free: rr_latch_ok(latch) && latch->state == RR_STATE_ARMED && latch->trip == RR_TRIP_NONE;
*/
void rr_latch_arm(struct rr_latch *latch);

/* A category 1 stop begins, in a live state. */
/*@ requires \valid(latch) && latch->trip < RR_TRIP_COUNT;
    assigns latch->state, latch->stop_begun;
    ensures rr_latch_ok(latch) && latch->state == RR_STATE_STOPPING && latch->stop_begun == tick;
*/
void rr_latch_stop(struct rr_latch *latch, uint32_t tick);

/* Must the category 1 stop end in this tick? `turning`: a bridge duty is not zero yet. */
/*@ requires \valid_read(latch);
    assigns \nothing;
    ensures S5_in_time: \result <==> latch->state == RR_STATE_STOPPING &&
                        (!turning || (uint32_t)(tick - latch->stop_begun) >= stop_ticks);
*/
bool rr_latch_stop_is_over(const struct rr_latch *latch, uint32_t tick, uint16_t stop_ticks, bool turning);

/* All outputs are off. */
/*@ requires \valid(latch) && latch->trip < RR_TRIP_COUNT;
    assigns latch->state, latch->trip;
    ensures S5_kept: latch->trip == \old(latch->trip);
    ensures S5_tripped: latch->state == (latch->trip != RR_TRIP_NONE ? RR_STATE_TRIPPED : RR_STATE_OFF);
    ensures rr_latch_ok(latch);
*/
void rr_latch_off(struct rr_latch *latch);

/* A trip comes. True where it latches: outputs off at once for category 0, a category 1 stop otherwise. */
/*@ requires \valid(latch) && rr_latch_ok(latch) && RR_TRIP_NONE < trip < RR_TRIP_COUNT;
    assigns latch->state, latch->trip, latch->stop_begun;
    ensures rr_latch_ok(latch) && (\result <==> rr_latches(\old(latch->state), trip));
    behavior off_at_once:
      assumes rr_latches(latch->state, trip) && !rr_slow(trip);
      ensures S5_off: latch->state == RR_STATE_TRIPPED && latch->trip == trip;
    behavior stops_first:
      assumes rr_latches(latch->state, trip) && rr_slow(trip);
      ensures S5_stop: latch->state == RR_STATE_STOPPING && latch->trip == trip && latch->stop_begun == tick;
    behavior passed_over:
      assumes !rr_latches(latch->state, trip);
      ensures S5_kept: latch->state == \old(latch->state) && latch->trip == \old(latch->trip);
      ensures S5_kept: latch->stop_begun == \old(latch->stop_begun);
    complete behaviors;
    disjoint behaviors;
*/
bool rr_latch_trip(struct rr_latch *latch, uint8_t trip, uint32_t tick);

/* `clear`, in state `tripped`. */
/*@ requires \valid(latch) && rr_latch_ok(latch) && latch->state == RR_STATE_TRIPPED;
    assigns latch->state, latch->trip;
    ensures S5_off: rr_latch_ok(latch) && latch->state == RR_STATE_OFF;
*/
void rr_latch_clear(struct rr_latch *latch);

#endif
