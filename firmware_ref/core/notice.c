/* Notices: what happened, told in order, and the words that answers share with them (SPEC section 14). */
#include "device.h"

struct name {
    char text[13];
};

#define NAME2(NAME, word) {word},
#define NAME3(NAME, word, number) {word},
#define NAME4(NAME, word, number, category) {word},
static const RR_FLASH struct name notice_names[] = {RR_NOTICE_LIST(NAME2)};
static const RR_FLASH struct name state_names[] = {RR_STATE_LIST(NAME3)};
static const RR_FLASH struct name source_names[] = {RR_SOURCE_LIST(NAME3)};
static const RR_FLASH struct name cause_names[] = {RR_CAUSE_LIST(NAME3)};
static const RR_FLASH struct name trip_names[] = {RR_TRIP_LIST(NAME4)};

const RR_FLASH char *rr_state_word(uint8_t state)
{
    return state_names[state].text;
}

const RR_FLASH char *rr_trip_word(uint8_t trip)
{
    return trip_names[trip].text;
}

/* Field 0 is the protocol's version; the rest as `who` lists them. */
bool rr_notice_identity_field(struct rr_device *device, uint8_t field)
{
    static const RR_FLASH uint32_t sizes[] = {RR_TICK_US, RR_AXES, RR_SERVOS, RR_MAX_DUTY,
                                              RR_QUEUE,   RR_TRAIL, RR_KEEP,  RR_CAPS};
    switch (field) {
    case 0:
        rr_voice_u32(&device->voice, RR_VERSION);
        return true;
    case 1:
        rr_voice_word(&device->voice, device->port->firmware);
        return true;
    case 2:
        rr_voice_word(&device->voice, device->port->board);
        return true;
    case 3:
        rr_voice_word(&device->voice, device->port->serial);
        return true;
    case 4:
        rr_voice_u32(&device->voice, device->boot);
        return true;
    default:
        if (field - 5u < sizeof sizes / sizeof sizes[0]) {
            rr_voice_u32(&device->voice, sizes[field - 5u]);
            return true;
        }
        return false;
    }
}

/* How many fields a notice has after its tick; `who` knows itself. */
static const RR_FLASH uint8_t own_fields[] = {
    [RR_NOTICE_BOOT] = 2, [RR_NOTICE_WHO] = 13, [RR_NOTICE_STOP] = 2,  [RR_NOTICE_OFF] = 1,
    [RR_NOTICE_TRIP] = 4, [RR_NOTICE_DONE] = 1, [RR_NOTICE_DWELL] = 2, [RR_NOTICE_GARBLED] = 1,
};
_Static_assert(sizeof own_fields == RR_NOTICE_COUNT, "one row a notice");

/* Of a trip: its word, index, value and bound. */
static void trip_field(struct rr_device *device, uint8_t index, uint8_t field)
{
    bool is_last = device->last_trip.trip == index >> 4;
    const struct rr_finding *trip = is_last ? &device->last_trip : &device->trip_before;
    if (field == 0) {
        rr_voice_word(&device->voice, rr_trip_word(index >> 4));
    } else if (field == 1) {
        rr_voice_u32(&device->voice, index & 0xFu);
    } else {
        rr_voice_i32(&device->voice, field == 2 ? trip->value : trip->bound);
    }
}

/* The fields after word and tick, counted from 0. */
static bool own_field(struct rr_device *device, const struct rr_happened *happened, uint8_t field)
{
    struct rr_voice *voice = &device->voice;
    if (field >= own_fields[happened->kind]) {
        return false;
    }
    switch (happened->kind) {
    case RR_NOTICE_WHO:
        return rr_notice_identity_field(device, field);
    case RR_NOTICE_OFF:
        rr_voice_word(voice, rr_state_word(happened->index));
        return true;
    case RR_NOTICE_DONE:
        rr_voice_hex2(voice, ' ', happened->index);
        return true;
    case RR_NOTICE_TRIP:
        trip_field(device, happened->index, field);
        return true;
    default:
        break;
    }
    if (field == 1 && happened->kind == RR_NOTICE_BOOT) {
        rr_voice_word(voice, cause_names[happened->index].text);
    } else if (field == 1 && happened->kind == RR_NOTICE_STOP) {
        rr_voice_word(voice, source_names[happened->index].text);
    } else if (happened->kind == RR_NOTICE_GARBLED) {
        rr_voice_u32(voice, device->garbled_told);
    } else if (field == 0 && happened->kind == RR_NOTICE_BOOT) {
        rr_voice_u32(voice, device->boot);
    } else if (field == 0 && happened->kind == RR_NOTICE_DWELL) {
        rr_voice_u32(voice, happened->index);
    } else {
        rr_voice_u32(voice, happened->value);
    }
    return true;
}

bool rr_notice_field(struct rr_device *device, uint8_t field)
{
    const struct rr_happened *happened = &device->notices.happened[device->notices.first];
    switch (field) {
    case 0:
        rr_voice_hex2(&device->voice, 'N', happened->number);
        return true;
    case 1:
        rr_voice_word(&device->voice, notice_names[happened->kind].text);
        return true;
    case 2:
        rr_voice_u32(&device->voice, device->tick - (uint16_t)((uint16_t)device->tick - happened->tick_low));
        return true;
    default:
        return own_field(device, happened, (uint8_t)(field - 3u));
    }
}

void rr_notice_push(struct rr_device *device, uint8_t kind, uint8_t index, uint16_t value)
{
    struct rr_notices *notices = &device->notices;
    uint8_t number = notices->number++;
    bool taking = device->taking;
    device->taking = false;
    while (notices->count == RR_NOTICES && rr_device_say(device)) { /* a flood in one tick: told early */
    }
    device->taking = taking;
    if (notices->count == RR_NOTICES) {
        return; /* no room: the host sees by the number that one is missing */
    }
    uint8_t place = (uint8_t)(notices->first + notices->count);
    struct rr_happened *happened = &notices->happened[place >= RR_NOTICES ? place - RR_NOTICES : place];
    notices->count++;
    happened->kind = kind;
    happened->index = index;
    happened->value = value;
    happened->number = number;
    happened->tick_low = (uint16_t)device->tick;
}
