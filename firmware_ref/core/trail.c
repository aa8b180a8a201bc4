/* The fast record from around the last trip; see trail.h. */
#include "trail.h"

void rr_trail_begin(struct rr_trail *trail)
{
    trail->next = 0;
    trail->held = 0;
    trail->phase = RR_TRAIL_RUNNING;
}

void rr_trail_trip(struct rr_trail *trail)
{
    if (trail->phase != RR_TRAIL_FROZEN) {
        trail->phase = RR_TRAIL_ENDING;
        trail->to_go = RR_TRAIL / 4;
    }
}

bool rr_trail_wants(const struct rr_trail *trail, bool live)
{
    return trail->phase == RR_TRAIL_ENDING || (live && trail->phase == RR_TRAIL_RUNNING);
}

struct rr_record *rr_trail_add(struct rr_trail *trail, uint32_t tick)
{
    struct rr_record *record = &trail->record[trail->next];
    trail->next = (rr_trail_index)(trail->next + 1u == RR_TRAIL ? 0 : trail->next + 1u);
    trail->last_tick = tick;
    if (trail->held < RR_TRAIL) {
        trail->held++;
    }
    if (trail->phase == RR_TRAIL_ENDING && --trail->to_go == 0) {
        trail->phase = RR_TRAIL_FROZEN;
    }
    return record;
}

const struct rr_record *rr_trail_get(const struct rr_trail *trail, uint16_t index, uint32_t *tick)
{
    uint16_t place = (uint16_t)((uint32_t)trail->next + RR_TRAIL - trail->held + index);
    while (place >= RR_TRAIL) {
        place = (uint16_t)(place - RR_TRAIL);
    }
    *tick = trail->last_tick - (uint32_t)(trail->held - 1u - index);
    return &trail->record[place];
}

int32_t rr_trail_counts(const struct rr_trail *trail, const struct rr_record *record, uint8_t axis)
{
    uint32_t last = (uint32_t)trail->last_counts[axis];
    RR_TRAIL_COUNTS turned = (RR_TRAIL_COUNTS)(record->counts[axis] - (RR_TRAIL_COUNTS)last);
    int32_t way = sizeof turned == 2 ? (int16_t)turned : (int32_t)turned;
    return (int32_t)(last + (uint32_t)way);
}

_Static_assert(sizeof(RR_TRAIL_COUNTS) == 2 || sizeof(RR_TRAIL_COUNTS) == 4, "rr_trail_counts knows these widths");
