/* The chain of one axis in a tick: ceiling, slew, dwell lock, bridge (SPEC section 12, S1 to S3, CHAIN-1 to CHAIN-4).
 *
 * Pure step functions over integers: all state is in the structs, nothing is read or written elsewhere. */
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

/* Judges standstill by the counts of this tick; call once a tick in every state. */
void rr_chain_watch(struct rr_chain *chain, const struct rr_chain_limits *limits, int32_t counts);

/* Moves the duty one tick towards the demand and returns it. */
int16_t rr_chain_step(struct rr_chain *chain, const struct rr_chain_limits *limits, int16_t demand,
                      struct rr_chain_news *news);

/* The bridge was switched off: ends the tick with duty 0. */
void rr_chain_off(struct rr_chain *chain);

#endif
