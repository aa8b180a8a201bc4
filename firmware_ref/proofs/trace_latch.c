/* S5 over every history, from the contracts of the latch's steps alone: proved, never run.
 *
 * In a tick anything may happen that the device does with its latch: requests (arm, stop, clear) in (a), a trip in (c), the
 * end of a category 1 stop in (e). The ghost variables tell the history: is a trip waiting for its `clear`, is a `clear`
 * waiting for its `arm`, and for how many ticks a category 1 stop has run. The tick wraps as often as it likes, `ticks` counts
 * them all. */
#include "../core/latch.h"

/*@ assigns \nothing; */
extern bool any_choice(void);
/*@ assigns \nothing;
    ensures RR_TRIP_NONE < \result < RR_TRIP_COUNT; */
extern uint8_t any_trip(void);
/*@ assigns \nothing; */
extern uint32_t any_tick(void);
/*@ assigns \nothing;
    ensures 1 <= \result <= 5000; */
extern uint16_t any_stop_ticks(void);

/* C's rule for what is put into a uint32_t (ISO/IEC 9899 6.3.1.3), which this version of WP has inside the range only. */
/*@ axiomatic Wrap {
      axiom below: \forall integer x; -0x100000000 <= x < 0 ==> (uint32_t)x == x + 0x100000000;
      axiom above: \forall integer x; 0x100000000 <= x < 0x200000000 ==> (uint32_t)x == x - 0x100000000;
    }
    lemma rr_tick_on: \forall integer tick, begun; 0 <= tick <= UINT32_MAX && 0 <= begun <= UINT32_MAX &&
      (uint32_t)(tick - begun) < UINT32_MAX ==>
      (uint32_t)((uint32_t)(tick + 1) - begun) == (uint32_t)(tick - begun) + 1;
*/

void every_history(void)
{
    struct rr_latch latch = {RR_STATE_OFF, RR_TRIP_NONE, 0};
    uint16_t stop_ticks = any_stop_ticks();
    uint32_t tick = any_tick();
    //@ ghost int tripped = 0;
    //@ ghost int armed_since_trip = 1;
    //@ ghost uint32_t stopping_for = 0;
    /*@ loop invariant rr_latch_ok(&latch);
        loop invariant S5_latched: tripped == 1 ==> latch.trip != RR_TRIP_NONE && latch.state >= RR_STATE_STOPPING;
        loop invariant S5_armed: armed_since_trip == 0 ==> latch.state != RR_STATE_ARMED;
        loop invariant tripped == 0 || tripped == 1;
        loop invariant latch.trip != RR_TRIP_NONE ==> tripped == 1;
        loop invariant S5_in_time: latch.state == RR_STATE_STOPPING ==>
                       stopping_for <= stop_ticks && (uint32_t)(tick - latch.stop_begun) == stopping_for;
        loop assigns ticks, tick, latch, tripped, armed_since_trip, stopping_for;
        loop variant UINT64_MAX - ticks; */
    for (uint64_t ticks = 0; ticks < UINT64_MAX; ticks++) {
        if (latch.state == RR_STATE_OFF && any_choice()) {
            rr_latch_arm(&latch);
            //@ assert S5_arm_after_clear: tripped == 0;
            //@ ghost armed_since_trip = 1;
        }
        if (latch.state == RR_STATE_TRIPPED && any_choice()) {
            rr_latch_clear(&latch);
            //@ ghost tripped = 0;
        }
        if (latch.state == RR_STATE_ARMED && any_choice()) {
            rr_latch_stop(&latch, tick);
            //@ ghost stopping_for = 0;
        }
        if (rr_latch_is_live(&latch) && any_choice()) {
            rr_latch_off(&latch);
        }
        if (any_choice()) {
            bool live = rr_latch_is_live(&latch);
            bool stopping = latch.state == RR_STATE_STOPPING;
            bool latched = rr_latch_trip(&latch, any_trip(), tick);
            //@ ghost if (live && !stopping) { stopping_for = 0; }
            //@ ghost tripped = latched ? 1 : tripped;
            //@ ghost armed_since_trip = latched ? 0 : armed_since_trip;
        }
        if (rr_latch_stop_is_over(&latch, tick, stop_ticks, any_choice())) {
            rr_latch_off(&latch);
        }
        //@ ghost stopping_for = latch.state == RR_STATE_STOPPING ? stopping_for + 1 : 0;
        //@ assert latch.state == RR_STATE_STOPPING ==> (uint32_t)(tick - latch.stop_begun) + 1 == stopping_for <= 5000;
        tick++;
    }
}
