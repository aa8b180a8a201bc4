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

/* Are the outputs enabled? */
bool rr_latch_is_live(const struct rr_latch *latch);

/* The stop category of a trip. */
uint8_t rr_latch_category(uint8_t trip);

/* `arm`, in state `off`. */
void rr_latch_arm(struct rr_latch *latch);

/* A category 1 stop begins, in a live state. */
void rr_latch_stop(struct rr_latch *latch, uint32_t tick);

/* Must the category 1 stop end in this tick? `turning`: a bridge duty is not zero yet. */
bool rr_latch_stop_is_over(const struct rr_latch *latch, uint32_t tick, uint16_t stop_ticks, bool turning);

/* All outputs are off. */
void rr_latch_off(struct rr_latch *latch);

/* A trip comes. True where it latches: outputs off at once for category 0, a category 1 stop otherwise. */
bool rr_latch_trip(struct rr_latch *latch, uint8_t trip, uint32_t tick);

/* `clear`, in state `tripped`. */
void rr_latch_clear(struct rr_latch *latch);

#endif
