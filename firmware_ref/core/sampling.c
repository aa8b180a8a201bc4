/* Samples on their way to the host: log, again, trail (SPEC LOG-1 to LOG-5, TRAIL-2, DATA-1, DATA-9). */
#include "device.h"

#define STATE_BIT  18u
#define SUPPLY_BIT 16u
#define TEMPERATURE_BIT 17u
#define SERVO_BIT  12u

uint16_t rr_sampling_state_bits(const struct rr_device *device)
{
    bool braking = false;
    bool live = rr_latch_is_live(&device->latch);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        braking = braking || (live && device->axis[i].brake && device->axis[i].chain.duty == 0);
    }
    return (uint16_t)(device->latch.state << RR_BITS_STATE_LOW | device->locked << RR_BITS_DWELL_LOCK_LOW |
                      device->at_ceiling << RR_BITS_AT_CEILING_LOW | device->at_slew << RR_BITS_AT_SLEW_LOW |
                      braking << RR_BITS_BRAKING_LOW | device->latch.trip << RR_BITS_TRIP_LOW);
}

bool rr_sampling_mask_fits(uint32_t mask)
{
    uint32_t fitted = (((uint32_t)1 << RR_SERVOS) - 1u) << SERVO_BIT | (uint32_t)1 << STATE_BIT;
    fitted |= (RR_CAPS & RR_CAP_SUPPLY) != 0 ? (uint32_t)1 << SUPPLY_BIT : 0u;
    fitted |= (RR_CAPS & RR_CAP_TEMPERATURE) != 0 ? (uint32_t)1 << TEMPERATURE_BIT : 0u;
    for (uint8_t i = 0; i < RR_AXES; i++) {
        fitted |= (uint32_t)1 << (3 * i);
        fitted |= (RR_CAPS & RR_CAP_ENCODER) != 0 ? (uint32_t)2 << (3 * i) : 0u;
        fitted |= (RR_CAPS & RR_CAP_CURRENT) != 0 ? (uint32_t)4 << (3 * i) : 0u;
    }
    return (mask & ~fitted) == 0;
}

static int32_t value_of(const struct rr_device *device, uint8_t bit)
{
    if (bit == SUPPLY_BIT) {
        return device->inputs.supply_mv;
    }
    if (bit == TEMPERATURE_BIT) {
        return device->inputs.temperature_dc;
    }
    if (bit == STATE_BIT) {
        return rr_sampling_state_bits(device);
    }
#if RR_SERVOS > 0
    if (bit >= SERVO_BIT) {
        return device->servo[bit - SERVO_BIT].pulse_ns / 1000;
    }
#endif
    uint8_t axis = (uint8_t)(bit / 3u);
    switch (bit % 3u) {
    case 0:
        return device->axis[axis].chain.duty;
    case 1:
        return device->inputs.counts[axis];
    default:
        return device->inputs.current_ma[axis];
    }
}

#if RR_KEEP > 0
static char *place_to_keep(struct rr_logging *logging, uint8_t number)
{
    if (logging->kept_count < RR_KEEP) {
        logging->kept_count++;
    }
    return logging->kept[number % RR_KEEP];
}
#endif

/* Begins a data line; a copy is kept for `again`. */
static void begin_line(struct rr_device *device, struct rr_out *out)
{
    char *copy = NULL;
#if RR_KEEP > 0
    copy = place_to_keep(&device->logging, device->logging.number);
#endif
    rr_out_begin(out, device->port, device->self, copy, RR_DEVICE_LINE_MAX);
    rr_out_char(out, 'D');
    rr_out_hex2(out, device->logging.number);
}

static void end_line(struct rr_device *device, struct rr_out *out, uint8_t samples)
{
    struct rr_logging *logging = &device->logging;
    uint8_t length = rr_out_end(out);
#if RR_KEEP > 0
    logging->kept_length[logging->number % RR_KEEP] = length;
#else
    (void)length;
#endif
    logging->number++;
    if (out->mute) {
        logging->dropped_ever += samples;
    }
}

static void send_block(struct rr_device *device)
{
    struct rr_block *block = &device->logging.block;
    uint8_t samples = block->samples;
    if (samples == 0) {
        return;
    }
    uint8_t length = rr_block_close(block);
    struct rr_out out;
    begin_line(device, &out);
    rr_out_char(&out, ' ');
    for (uint8_t i = 0; i < length; i++) {
        rr_out_char(&out, block->payload[i]);
    }
    end_line(device, &out, samples);
}

static void send_plain(struct rr_device *device)
{
    const struct rr_logging *logging = &device->logging;
    struct rr_out out;
    begin_line(device, &out);
    rr_out_u32(&out, device->tick);
    rr_out_u32(&out, logging->period);
    rr_out_u32(&out, logging->mask);
    for (uint8_t bit = 0; bit < 20; bit++) {
        if ((logging->mask >> bit & 1u) != 0) {
            rr_out_i32(&out, rr_block_held(bit, value_of(device, bit)));
        }
    }
    end_line(device, &out, 1);
}

uint32_t rr_sampling_change(struct rr_device *device, uint16_t period, uint32_t mask, uint8_t form)
{
    struct rr_logging *logging = &device->logging;
    send_block(device);
    uint32_t made = logging->made;
    logging->made = 0;
    logging->period = period;
    logging->mask = mask;
    logging->form = form;
    logging->next_tick = device->tick + 1u;
#if RR_KEEP > 0
    if (period != 0) { /* after `log 0` the lines stay kept: a host asks for those lost at the end */
        logging->kept_count = 0;
    }
#endif
    rr_block_prepare(&logging->block, mask, period, logging->payload, RR_PAYLOAD_MAX);
    return made;
}

static void sample(struct rr_device *device)
{
    struct rr_logging *logging = &device->logging;
    logging->made++;
    logging->made_ever++;
    logging->next_tick += logging->period;
    if (logging->form == RR_FORM_PLAIN) {
        send_plain(device);
        return;
    }
    int32_t values[RR_CHANNELS];
    uint8_t channels = 0;
    for (uint8_t bit = 0; bit < 20; bit++) {
        if ((logging->mask >> bit & 1u) != 0) {
            values[channels++] = value_of(device, bit);
        }
    }
    if (!rr_block_add(&logging->block, device->tick, values)) {
        send_block(device);
        (void)rr_block_add(&logging->block, device->tick, values);
    }
}

void rr_sampling_tick(struct rr_device *device)
{
    struct rr_logging *logging = &device->logging;
    if (logging->period == 0) {
        return;
    }
    if (device->tick == logging->next_tick) {
        sample(device);
    }
    const struct rr_block *block = &logging->block;
    if (block->samples == RR_BLOCK_SAMPLES_MAX ||
        (block->samples != 0 && device->tick - block->first_tick >= RR_FLUSH_TICKS)) {
        send_block(device);
    }
}

bool rr_sampling_again(const struct rr_device *device, uint8_t number)
{
#if RR_KEEP > 0
    uint8_t age = (uint8_t)(device->logging.number - number); /* 1 = the last */
    return age >= 1 && age <= device->logging.kept_count;
#else
    (void)device;
    (void)number;
    return false;
#endif
}

void rr_sampling_send_again(struct rr_device *device, uint8_t number)
{
#if RR_KEEP > 0
    const struct rr_logging *logging = &device->logging;
    uint8_t length = logging->kept_length[number % RR_KEEP];
    if (device->port->room(device->self) >= length) {
        device->port->write(device->self, logging->kept[number % RR_KEEP], length);
    }
#else
    (void)device;
    (void)number;
#endif
}

uint8_t rr_sampling_trail(struct rr_device *device, uint8_t axis, uint32_t first, char *payload)
{
    const struct rr_trail *trail = &device->trail;
    if (trail->phase != RR_TRAIL_FROZEN || first >= trail->held) {
        return 0;
    }
    struct rr_block block;
    rr_block_prepare(&block, (uint32_t)7 << (3 * axis) | (uint32_t)1 << SUPPLY_BIT | (uint32_t)1 << STATE_BIT, 1,
                     payload, RR_TRAIL_PAYLOAD_MAX);
    for (uint16_t i = (uint16_t)first; i < trail->held; i++) {
        uint32_t tick;
        const struct rr_record *record = rr_trail_get(trail, i, &tick);
        int32_t values[] = {record->duty[axis], record->counts[axis], record->current_ma[axis], record->supply_mv,
                            record->bits};
        if (!rr_block_add(&block, tick, values)) {
            break;
        }
    }
    return rr_block_close(&block);
}
