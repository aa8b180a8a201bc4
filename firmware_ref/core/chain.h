/* The chain of one axis in a tick: ceiling, slew, dwell lock, bridge (SPEC section 12, S1 to S3, CHAIN-1 to CHAIN-4).
 *
 * Pure step functions over integers: all state is in the structs, nothing is read or written elsewhere. The contracts
 * (comments with an @, in ACSL) are proved by scripts/dev/prove.py; see proofs/README.md. */
#ifndef RAMPRIG_CHAIN_H
#define RAMPRIG_CHAIN_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_chain_limits {
    int16_t ceiling_duty; /* 0 .. RR_MAX_DUTY */
    int16_t slew_up_duty; /* 1 .. RR_DUTY_FULL, a tick */
    int16_t slew_down_duty;
    uint16_t dwell_ticks;
    uint16_t still_ticks;
    int16_t still_counts;
    int8_t sense; /* 0 = no encoder: the dwell alone decides */
};

struct rr_chain {
    int16_t duty;       /* at the bridge in the last tick */
    int8_t last_sign;   /* of the last duty that was not zero; 0 since start */
    uint16_t zero_for;  /* ticks ended with the bridge at zero, held at 65535 */
    uint16_t still_for; /* ticks for which the counts have stayed by `mark`, held at 65535 */
    int32_t mark;       /* counts by which standstill is judged */
    uint16_t held_for;  /* ticks for which the dwell lock has held a demand back, held at 65535 */
};

/* What a step did besides the new duty. */
struct rr_chain_news {
    bool at_ceiling; /* the ceiling cut the demand */
    bool at_slew;    /* the slew limit held the duty back */
    bool locked;     /* the dwell lock held it at zero */
    uint16_t let_go; /* ticks the lock had held, in the tick in which it let go; else 0 */
    bool settled;    /* the duty equals the demand */
};

/*@ predicate rr_chain_limits_ok(struct rr_chain_limits *l) =
      0 <= l->ceiling_duty <= RR_DUTY_FULL && 1 <= l->slew_up_duty <= RR_DUTY_FULL &&
      1 <= l->slew_down_duty <= RR_DUTY_FULL && 0 <= l->still_counts && -1 <= l->sense <= 1;

    predicate rr_chain_ok(struct rr_chain *c) =
      -RR_DUTY_FULL <= c->duty <= RR_DUTY_FULL && -1 <= c->last_sign <= 1 &&
      (c->duty > 0 ==> c->last_sign == 1) && (c->duty < 0 ==> c->last_sign == -1);

    logic integer rr_size(integer duty) = duty < 0 ? -duty : duty;
    logic integer rr_one_more(integer ticks) = ticks >= 65535 ? 65535 : ticks + 1;

    // CHAIN-1: what is left of a duty where the ceiling was tightened
    logic integer rr_cut(integer duty, integer ceiling) = rr_size(duty) > ceiling ? ceiling : rr_size(duty);

    // S3: what must hold before the bridge leaves zero for the other sign
    predicate rr_rested(struct rr_chain *c, struct rr_chain_limits *l) =
      c->zero_for >= l->dwell_ticks && (l->sense == 0 || c->still_for >= l->still_ticks);

    // S3: the counts' way from the mark, over the wrap
    logic integer rr_away(integer counts, integer mark) = (int32_t)(uint32_t)((uint32_t)counts - (uint32_t)mark);
*/

/* Judges standstill by the counts of this tick; call once a tick in every state. */
/*@ requires \valid(chain) && \valid_read(limits) && \separated(chain, limits);
    requires rr_chain_limits_ok(limits);
    assigns chain->mark, chain->still_for;
    behavior stayed:
      assumes -limits->still_counts <= rr_away(counts, chain->mark) <= limits->still_counts;
      ensures S3_mark: chain->mark == \old(chain->mark);
      ensures S3_still: chain->still_for == rr_one_more(\old(chain->still_for));
    behavior left:
      assumes !(-limits->still_counts <= rr_away(counts, chain->mark) <= limits->still_counts);
      ensures S3_mark: chain->mark == counts;
      ensures S3_still: chain->still_for == 0;
    complete behaviors;
    disjoint behaviors;
*/
void rr_chain_watch(struct rr_chain *chain, const struct rr_chain_limits *limits, int32_t counts);

/* Moves the duty one tick towards the demand and returns it. */
/*@ requires \valid(chain) && \valid_read(limits) && \valid(news) && \separated(chain, limits, news);
    requires rr_chain_limits_ok(limits) && rr_chain_ok(chain);
    assigns chain->duty, chain->last_sign, chain->zero_for, chain->held_for, *news;
    ensures rr_chain_ok(chain) && \result == chain->duty;
    ensures S1: -limits->ceiling_duty <= \result <= limits->ceiling_duty;
    ensures S2_up: rr_size(\result) <= rr_cut(\old(chain->duty), limits->ceiling_duty) + limits->slew_up_duty;
    ensures S2_down: rr_size(\result) >= rr_cut(\old(chain->duty), limits->ceiling_duty) - limits->slew_down_duty;
    ensures S3_zero_first: (\old(chain->duty) > 0 ==> \result >= 0) && (\old(chain->duty) < 0 ==> \result <= 0);
    ensures S3_positive: \old(chain->duty) == 0 && \result > 0 && \old(chain->last_sign) != 1 ==>
                         \old(rr_rested(chain, limits));
    ensures S3_negative: \old(chain->duty) == 0 && \result < 0 && \old(chain->last_sign) != -1 ==>
                         \old(rr_rested(chain, limits));
    ensures S3_count: chain->zero_for == (\result == 0 ? rr_one_more(\old(chain->zero_for)) : 0);
    ensures S3_sign: chain->last_sign == (\result > 0 ? 1 : \result < 0 ? -1 : \old(chain->last_sign));
    ensures news_settled: news->settled <==> \result == demand;
*/
int16_t rr_chain_step(struct rr_chain *chain, const struct rr_chain_limits *limits, int16_t demand,
                      struct rr_chain_news *news);

/* The bridge was switched off: ends the tick with duty 0. */
/*@ requires \valid(chain) && rr_chain_ok(chain);
    assigns chain->duty, chain->last_sign, chain->zero_for, chain->held_for;
    ensures rr_chain_ok(chain) && chain->duty == 0 && chain->last_sign == \old(chain->last_sign);
    ensures S3_count: chain->zero_for == rr_one_more(\old(chain->zero_for));
*/
void rr_chain_off(struct rr_chain *chain);

#endif
