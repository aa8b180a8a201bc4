/* The payload of a `trail` answer, made a record at a time (SPEC TRAIL-2). */
#include "device.h"

bool rr_packing_begin(struct rr_device *device, uint8_t axis, uint32_t first)
{
    const struct rr_trail *trail = RR_NEAR(&device->trail);
    if (trail->phase != RR_TRAIL_FROZEN || first >= trail->held) {
        return false;
    }
    struct rr_packing *packing = RR_NEAR(&device->u.packing);
    uint32_t mask = (uint32_t)7 << (3 * axis) | (uint32_t)1 << RR_CHANNEL_SUPPLY_MV | (uint32_t)1 << RR_CHANNEL_STATE;
    rr_block_prepare(&packing->block, mask, 1, packing->channel);
    rr_block_place(&packing->block, packing->bytes, RR_TRAIL_PAYLOAD);
    packing->next = (uint16_t)first;
    packing->axis = axis;
    device->packing_busy = true;
    return true;
}

void rr_packing_step(struct rr_device *device)
{
    struct rr_packing *packing = RR_NEAR(&device->u.packing);
    uint8_t axis = packing->axis;
    if (packing->next < device->trail.held) {
        uint32_t tick;
        const struct rr_record *record = rr_trail_get(&device->trail, packing->next, &tick);
        int32_t values[RR_TRAIL_CHANNELS] = {record->duty[axis], rr_trail_counts(&device->trail, record, axis),
                                             record->current_ma[axis], record->supply_mv, record->bits};
        packing->next++;
        if (rr_block_add(&packing->block, tick, values)) {
            return;
        }
    }
    packing->length = rr_block_close(&packing->block);
    device->packing_busy = false;
}
