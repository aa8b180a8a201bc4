/* Samples on their way to the host: log, again (SPEC LOG-1 to LOG-5, DATA-1, DATA-9). */
#include "device.h"
#include "kept.h"

#include <string.h>

static bool is_braking(const struct rr_device *device)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        if (device->axis[i].brake && device->axis[i].chain.duty == 0) {
            return rr_latch_is_live(&device->latch);
        }
    }
    return false;
}

uint16_t rr_sampling_state_bits(const struct rr_device *device)
{
    uint8_t low = (uint8_t)(device->latch.state << RR_BITS_STATE_LOW); /* by bytes, and no shift by a variable */
    if (device->locked) {
        low |= 1u << RR_BITS_DWELL_LOCK_LOW;
    }
    if (device->at_ceiling) {
        low |= 1u << RR_BITS_AT_CEILING_LOW;
    }
    if (device->at_slew) {
        low |= 1u << RR_BITS_AT_SLEW_LOW;
    }
    if (is_braking(device)) {
        low |= 1u << RR_BITS_BRAKING_LOW;
    }
    return (uint16_t)(low | device->latch.trip << RR_BITS_TRIP_LOW);
}
_Static_assert(RR_BITS_BRAKING_LOW < 8 && RR_BITS_TRIP_LOW == 8, "the trip has the upper byte");

/* The channels that this board has. */
#define HAS(capability, bits) ((RR_CAPS & RR_CAP_##capability) != 0 ? (uint32_t)(bits) : 0ul)
#define AN_AXIS (1ul << RR_CHANNEL_DUTY | HAS(ENCODER, 1ul << RR_CHANNEL_COUNTS) | HAS(CURRENT, 1ul << RR_CHANNEL_CURRENT_MA))
#define ALL_AXES (AN_AXIS | (RR_AXES > 1 ? AN_AXIS << 3 : 0ul) | (RR_AXES > 2 ? AN_AXIS << 6 : 0ul) | (RR_AXES > 3 ? AN_AXIS << 9 : 0ul))
#define FITTED (ALL_AXES | ((1ul << RR_SERVOS) - 1ul) << RR_CHANNEL_PULSE_US | HAS(SUPPLY, 1ul << RR_CHANNEL_SUPPLY_MV) | \
                HAS(TEMPERATURE, 1ul << RR_CHANNEL_TEMPERATURE_DC) | 1ul << RR_CHANNEL_STATE)

bool rr_sampling_mask_fits(uint32_t mask)
{
    return (mask & ~(uint32_t)FITTED) == 0;
}

int32_t rr_sampling_channel(const struct rr_device *device, uint8_t bit)
{
    uint8_t i = 0;
    switch (bit) {
    case RR_CHANNEL_SUPPLY_MV:
        return device->inputs.supply_mv;
    case RR_CHANNEL_TEMPERATURE_DC:
        return device->inputs.temperature_dc;
    case RR_CHANNEL_STATE:
        return rr_sampling_state_bits(device);
    default:
        break;
    }
#if RR_SERVOS > 0
    if (bit >= RR_CHANNEL_PULSE_US) {
        return rr_servo_us(device->servo[bit - RR_CHANNEL_PULSE_US].pulse_ns);
    }
#endif
    while (bit >= RR_AXIS_CHANNELS) {
        bit = (uint8_t)(bit - RR_AXIS_CHANNELS);
        i++;
    }
    if (bit == RR_CHANNEL_DUTY) {
        return device->axis[RR_AXIS(i)].chain.duty;
    }
    return bit == RR_CHANNEL_COUNTS ? device->inputs.counts[RR_AXIS(i)] : device->inputs.current_ma[RR_AXIS(i)];
}

/* The values of the channels that are logged, in order of their bits. */
static void gather(struct rr_device *device)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    const struct rr_channel *channel = logging->channel;
    int32_t *value = logging->sample;
    for (uint8_t left = logging->block.channels; left != 0; left--) {
        *value++ = rr_sampling_channel(device, channel->bit);
        channel++;
    }
}

static uint8_t after(uint8_t place)
{
    return place + 1u == RR_PARCELS ? 0 : (uint8_t)(place + 1u);
}

/* Ends the parcel that is being filled: it is to be said, or dropped whole (KIND-4), and kept either way. */
static void post(struct rr_device *device, uint8_t length, uint8_t samples)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    struct rr_parcel *parcel = &logging->parcel[logging->filling];
    parcel->length = length;
    parcel->number = logging->number++;
    bool no_room = !RR_SPREAD && RR_PORT(device)->room(RR_SELF(device)) < RR_DEVICE_LINE_MAX;
    if (logging->waiting || no_room) {
        logging->dropped_ever += samples;
    } else {
        logging->saying = logging->filling;
        logging->waiting = true;
    }
    uint8_t next = after(logging->filling);
    if (logging->waiting && next == logging->saying) {
        logging->kept_count = 0; /* a line is being said from the next parcel: this one is written over */
        return;
    }
    logging->filling = next;
    if (logging->kept_count != RR_KEEP) {
        logging->kept_count++;
    }
}

RR_APART static void place_block(struct rr_logging *logging)
{
    rr_block_place(&logging->block, logging->parcel[logging->filling].u.bytes, RR_PAYLOAD);
}

static void post_block(struct rr_device *device)
{
    struct rr_block *block = RR_NEAR(&device->logging.block);
    uint8_t samples = block->samples;
    if (samples == 0) {
        return;
    }
    post(device, rr_block_close(block), samples);
    place_block(&device->logging);
}

static void post_plain(struct rr_device *device, uint32_t tick)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    struct rr_parcel *parcel = &logging->parcel[logging->filling];
    parcel->u.plain.tick = tick;
    parcel->u.plain.mask = logging->block.mask;
    parcel->u.plain.period = logging->block.period;
    memcpy(parcel->u.plain.value, logging->sample, sizeof parcel->u.plain.value);
    post(device, 0, 1);
}

static void put_packed(struct rr_device *device, uint32_t tick)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    while (!rr_block_add(&logging->block, tick, logging->sample)) { /* a block's first sample always fits */
        post_block(device);
    }
}

bool rr_sampling_step(struct rr_device *device)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    if (!logging->taken && !logging->flush_due) {
        return false;
    }
    uint32_t tick = logging->next_tick - logging->block.period;
    if (!logging->taken) {
        post_block(device);
        logging->flush_due = false;
    } else if (logging->form == RR_FORM_PLAIN) {
        post_plain(device, tick);
    } else {
        put_packed(device, tick);
        logging->flush_due = (logging->flush_due && logging->block.samples != 1) ||
                             logging->block.samples == RR_BLOCK_SAMPLES_MAX;
    }
    logging->taken = false;
    return true;
}

uint32_t rr_sampling_change(struct rr_device *device, uint16_t period, uint32_t mask, uint8_t form)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    while (rr_sampling_step(device)) {
    }
    post_block(device);
    logging->goes_first = logging->waiting;
    uint32_t made = logging->made;
    logging->made = 0;
    logging->form = form;
    logging->next_tick = device->tick + 1u;
    if (period != 0) { /* after `log 0` the lines stay kept: a host asks for those lost at the end */
        logging->kept_count = 0;
    }
    rr_block_prepare(&logging->block, mask, period, logging->channel);
    place_block(logging);
    return made;
}

void rr_sampling_tick(struct rr_device *device)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    if (logging->block.period == 0) {
        return;
    }
    if ((uint16_t)device->tick == (uint16_t)logging->next_tick) { /* no period takes more than 16 bits */
        while (rr_sampling_step(device)) { /* the last one, where there was no time for it */
        }
        gather(device);
        logging->taken = true;
        logging->next_tick += logging->block.period;
        rr_kept_count(&logging->made);
        rr_kept_count(&logging->made_ever);
    }
    const struct rr_block *block = &logging->block;
    logging->flush_due = block->samples != 0 && (uint16_t)(device->tick - block->first_tick) >= RR_FLUSH_TICKS;
    while (!RR_SPREAD && rr_sampling_step(device)) {
    }
}

bool rr_sampling_again(struct rr_device *device, uint8_t number)
{
    struct rr_logging *logging = RR_NEAR(&device->logging);
    uint8_t age = (uint8_t)(logging->number - number); /* 1 = the last */
    if (RR_KEEP == 0 || age < 1 || age > logging->kept_count) {
        return false;
    }
    uint8_t place = (uint8_t)(logging->filling + RR_PARCELS - age);
    logging->again = place >= RR_PARCELS ? (uint8_t)(place - RR_PARCELS) : place;
    logging->again_waiting = true;
    return true;
}

/* Field `number` of a plain line's values: the bit it stands for is found by counting. */
static bool plain_value(struct rr_device *device, const struct rr_parcel *parcel, uint8_t number)
{
    uint8_t bit = 0;
    uint8_t left = number;
    for (uint32_t mask = parcel->u.plain.mask; mask != 0; mask >>= 1) {
        if ((mask & 1u) != 0 && left-- == 0) {
            rr_voice_i32(&device->voice, rr_block_held(bit, parcel->u.plain.value[number]));
            return true;
        }
        bit++;
    }
    return false;
}

bool rr_sampling_field(struct rr_device *device, const struct rr_parcel *parcel, uint8_t field)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    if (field == 0) {
        rr_voice_hex2(voice, 'D', parcel->number);
        return true;
    }
    if (parcel->length != 0) {
        rr_voice_bits(voice, parcel->u.bytes, parcel->length);
        return field == 1;
    }
    switch (field) {
    case 1:
        rr_voice_u32(voice, parcel->u.plain.tick);
        return true;
    case 2:
        rr_voice_u32(voice, parcel->u.plain.period);
        return true;
    case 3:
        rr_voice_u32(voice, parcel->u.plain.mask);
        return true;
    default:
        return plain_value(device, parcel, (uint8_t)(field - 4u));
    }
}
