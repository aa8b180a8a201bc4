/* The device's state and the latch of a trip; see latch.h. */
#include "latch.h"

#include "seeded.h"

#define CATEGORY(NAME, word, number, category) category,
static const RR_FLASH uint8_t categories[RR_TRIP_COUNT] = {RR_TRIP_LIST(CATEGORY)};
#undef CATEGORY

bool rr_latch_is_live(const struct rr_latch *latch)
{
    return latch->state == RR_STATE_ARMED || latch->state == RR_STATE_STOPPING;
}

uint8_t rr_latch_category(uint8_t trip)
{
    return categories[trip];
}

void rr_latch_arm(struct rr_latch *latch)
{
    latch->state = RR_STATE_ARMED;
}

RR_APART void rr_latch_stop(struct rr_latch *latch, uint32_t tick)
{
    latch->state = RR_STATE_STOPPING;
    latch->stop_begun = tick;
}

bool rr_latch_stop_is_over(const struct rr_latch *latch, uint32_t tick, uint16_t stop_ticks, bool turning)
{
    bool late = RR_SEEDED(STOP_NEVER_CUT, false, tick - latch->stop_begun >= stop_ticks);
    return latch->state == RR_STATE_STOPPING && (late || !turning);
}

void rr_latch_off(struct rr_latch *latch)
{
    latch->trip = RR_SEEDED(TRIP_CLEARS_ITSELF, RR_TRIP_NONE, latch->trip);
    latch->state = latch->trip != RR_TRIP_NONE ? RR_STATE_TRIPPED : RR_STATE_OFF;
}

bool rr_latch_trip(struct rr_latch *latch, uint8_t trip, uint32_t tick)
{
    uint8_t category = rr_latch_category(trip);
    if (!rr_latch_is_live(latch) || (latch->state == RR_STATE_STOPPING && category != 0)) {
        return false;
    }
    latch->trip = trip;
    if (category == 0) {
        rr_latch_off(latch);
    } else {
        rr_latch_stop(latch, tick);
    }
    return true;
}

void rr_latch_clear(struct rr_latch *latch)
{
    latch->trip = RR_TRIP_NONE;
    latch->state = RR_STATE_OFF;
}
