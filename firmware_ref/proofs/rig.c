/* The core behind a port of plain memory; see rig.h. */
#include "rig.h"

#include <string.h>

static int read_byte(void *self)
{
    struct rig *rig = self;
    if (rig->in_count == 0) {
        return -1;
    }
    uint8_t byte = rig->in[0];
    memmove(rig->in, rig->in + 1, --rig->in_count);
    return byte;
}

static uint16_t room(void *self)
{
    return (uint16_t)(RIG_OUT_MAX - ((const struct rig *)self)->out_count);
}

static void write_bytes(void *self, const char *bytes, uint8_t length)
{
    struct rig *rig = self;
    memcpy(rig->out + rig->out_count, bytes, length);
    rig->out_count = (uint16_t)(rig->out_count + length);
}

static bool took_break(void *self)
{
    struct rig *rig = self;
    bool broke = rig->broke;
    rig->broke = false;
    return broke;
}

static uint32_t none(void *self)
{
    (void)self;
    return 0;
}

static void inputs(void *self, struct rr_inputs *read)
{
    *read = ((const struct rig *)self)->inputs;
}

static void bridge(void *self, uint8_t axis, int16_t duty, bool brake)
{
    (void)axis;
    (void)brake;
    ((struct rig *)self)->duty = duty;
}

static void pulse(void *self, uint8_t servo, uint32_t pulse_ns)
{
    (void)servo;
    ((struct rig *)self)->pulse_ns = pulse_ns;
}

static void off(void *self)
{
    struct rig *rig = self;
    rig->duty = 0;
    rig->pulse_ns = 0;
}

static bool load(void *self, uint16_t offset, void *bytes, uint16_t length)
{
    memcpy(bytes, ((const struct rig *)self)->store + offset, length);
    return true;
}

static bool store(void *self, uint16_t offset, const void *bytes, uint16_t length)
{
    memcpy(((struct rig *)self)->store + offset, bytes, length);
    return true;
}

static const struct rr_port port = {read_byte, room,  write_bytes, took_break, none,   inputs, bridge, pulse,
                                    off,       load,  store,       none,       "fw-1", "rig",  "R1"};

void rig_clear(struct rig *rig)
{
    memset(rig, 0, sizeof *rig);
    memset(rig->store, 0xFF, sizeof rig->store);
    rig->inputs.supply_mv = 12000;
}

void rig_preset(struct rig *rig, uint8_t number, int32_t value)
{
    (void)rr_store_write(&port, rig, (uint8_t)(1u + rr_limits_place(number, 0)), value);
}

static void settle(struct rig *rig)
{
    while (RR_SPREAD && rr_device_idle(&rig->device, true)) {
    }
}

void rig_start(struct rig *rig, uint8_t cause, int32_t fault)
{
    rig->out_count = 0;
    rr_device_start(&rig->device, &port, rig, cause, fault);
    settle(rig);
}

void rig_tick(struct rig *rig)
{
    rig->out_count = 0;
    settle(rig); /* hears, where that is not done in the tick */
    rr_device_tick(&rig->device);
    settle(rig); /* and says */
}
