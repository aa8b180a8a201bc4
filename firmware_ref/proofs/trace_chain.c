/* S1, S2 and S3 over every history, from the contracts of the chain's steps alone: proved, never run.
 *
 * A tick takes whatever counts, demand and limits there may be. The ghost counters are those of SPEC section 12 without
 * the core's saturation: ticks in a row that ended with the bridge at zero, ticks for which the counts have stayed by the
 * mark, and the last sign that the bridge had. */
#include "../core/chain.h"

#include <stdbool.h>

/*@ assigns \nothing; */
extern int32_t any_counts(void);
/*@ assigns \nothing; */
extern int16_t any_demand(void);
/*@ assigns \nothing; */
extern bool any_choice(void);
/*@ requires \valid(limits);
    assigns *limits;
    ensures rr_chain_limits_ok(limits) && limits->dwell_ticks <= 60000 && limits->still_ticks <= 10000; */
extern void any_limits(struct rr_chain_limits *limits);

void every_history(void)
{
    struct rr_chain chain = {0, 0, 0, 0, 0, 0};
    struct rr_chain_limits limits;
    struct rr_chain_news news;
    //@ ghost int last_sign = 0;
    //@ ghost uint64_t zero_ticks = 0;
    //@ ghost uint64_t still_ticks = 0;
    /*@ loop invariant rr_chain_ok(&chain) && chain.last_sign == last_sign;
        loop invariant 0 <= zero_ticks <= tick && 0 <= still_ticks <= tick;
        loop invariant chain.zero_for == (zero_ticks > 65535 ? 65535 : zero_ticks);
        loop invariant chain.still_for == (still_ticks > 65535 ? 65535 : still_ticks);
        loop assigns tick, chain, limits, news, last_sign, zero_ticks, still_ticks;
        loop variant UINT64_MAX - tick; */
    for (uint64_t tick = 0; tick < UINT64_MAX; tick++) {
        int32_t counts = any_counts();
        any_limits(&limits);
        //@ ghost int32_t away = (int32_t)((uint32_t)counts - (uint32_t)chain.mark);
        //@ ghost still_ticks = -limits.still_counts <= away && away <= limits.still_counts ? still_ticks + 1 : 0;
        int16_t before = chain.duty;
        rr_chain_watch(&chain, &limits, counts);
        if (any_choice()) {
            rr_chain_off(&chain);
        } else {
            rr_chain_step(&chain, &limits, any_demand(), &news);
            //@ assert S1: -limits.ceiling_duty <= chain.duty <= limits.ceiling_duty;
            //@ assert S2_up: rr_size(chain.duty) <= rr_cut(before, limits.ceiling_duty) + limits.slew_up_duty;
            //@ assert S2_down: rr_size(chain.duty) >= rr_cut(before, limits.ceiling_duty) - limits.slew_down_duty;
        }
        /*@ assert S3_dwell: before == 0 && chain.duty != 0 && (chain.duty > 0 ? 1 : -1) != last_sign ==>
                             zero_ticks >= limits.dwell_ticks; */
        /*@ assert S3_still: before == 0 && chain.duty != 0 && (chain.duty > 0 ? 1 : -1) != last_sign &&
                             limits.sense != 0 ==> still_ticks >= limits.still_ticks; */
        //@ assert S3_never_at_once: !(before > 0 && chain.duty < 0) && !(before < 0 && chain.duty > 0);
        //@ ghost zero_ticks = chain.duty == 0 ? zero_ticks + 1 : 0;
        //@ ghost last_sign = chain.duty > 0 ? 1 : chain.duty < 0 ? -1 : last_sign;
    }
}
