/* Stops and trips: how the outputs go off and what latches (SPEC STOP-1 to STOP-6, TRIP-1, TRIP-2). */
#include "device.h"

/* The queue is empty with the state: it is there in `armed` only, and `arm` begins it. Its memory may hold a trail now. */
static void end_orders(struct rr_device *device)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        rr_glide_end(&device->axis[i].demand, 0);
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        rr_glide_end(&device->servo[i].swing, device->servo[i].pulse_ns);
    }
#endif
}

void rr_stop_off(struct rr_device *device)
{
    RR_PORT(device)->off(RR_SELF(device));
    end_orders(device);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        device->axis[i].chain.duty = 0;
        device->axis[i].chain.held_for = 0;
        device->axis[i].brake = false;
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        device->servo[i].pulse_ns = 0;
    }
#endif
    rr_latch_off(&device->latch);
    rr_notice_push(device, RR_NOTICE_OFF, device->latch.state, 0);
}

void rr_stop_begin(struct rr_device *device, uint8_t category, uint8_t source)
{
    rr_notice_push(device, RR_NOTICE_STOP, source, category);
    if (category == 0) {
        rr_stop_off(device);
        return;
    }
    end_orders(device);
    rr_latch_stop(&device->latch, device->tick);
}

void rr_stop_trip(struct rr_device *device, const struct rr_finding *finding)
{
    if (!rr_latch_trip(&device->latch, finding->trip, device->tick)) {
        return;
    }
    device->trip_before = device->last_trip;
    device->last_trip = *finding;
    device->last_trip_tick = device->tick;
    rr_trail_trip(&device->trail);
    rr_notice_push(device, RR_NOTICE_TRIP, (uint8_t)(finding->trip << 4 | finding->index), 0);
    if (rr_latch_category(finding->trip) == 0) {
        rr_stop_off(device);
    } else {
        rr_stop_begin(device, 1, RR_SOURCE_TRIP);
    }
}
