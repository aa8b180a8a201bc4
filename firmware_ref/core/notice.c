/* Notices: what happened, told in order, and the words that answers share with them (SPEC section 14). */
#include "device.h"

#include "names.h"

static const RR_FLASH char names[] = RR_NOTICE_LIST(RR_NAME);
static const RR_FLASH char states[] = RR_STATE_LIST(RR_NAME);
static const RR_FLASH char sources[] = RR_SOURCE_LIST(RR_NAME);
static const RR_FLASH char causes[] = RR_CAUSE_LIST(RR_NAME);
static const RR_FLASH char trips[] = RR_TRIP_LIST(RR_NAME);

static void say_name(struct rr_voice *voice, const RR_FLASH char *table, uint8_t place)
{
    rr_voice_word(voice, rr_names_at(table, place));
}

void rr_notice_say_state(struct rr_voice *voice, uint8_t state)
{
    say_name(voice, states, state);
}

void rr_notice_say_trip(struct rr_voice *voice, uint8_t trip)
{
    say_name(voice, trips, trip);
}

/* The numbers of `who`: the first before its words, the others after its boot number. */
static const RR_FLASH uint16_t sizes[] = {RR_VERSION, RR_TICK_US, RR_AXES, RR_SERVOS, RR_MAX_DUTY, RR_QUEUE, RR_TRAIL, RR_KEEP, RR_CAPS};
#define SIZES (sizeof sizes / sizeof sizes[0])
_Static_assert(RR_TICK_US <= 65535 && RR_KEEP <= 65535 && RR_TRAIL <= 65535 && (uint16_t)(RR_CAPS) == (RR_CAPS), "two bytes each");

bool rr_notice_identity_field(struct rr_device *device, uint8_t field)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    switch (field) {
    case 1:
        rr_voice_word(voice, RR_PORT(device)->firmware);
        return true;
    case 2:
        rr_voice_word(voice, RR_PORT(device)->board);
        return true;
    case 3:
        rr_voice_word(voice, RR_PORT(device)->serial);
        return true;
    case 4:
        rr_voice_u32(voice, device->boot);
        return true;
    default:
        if (field != 0) {
            field = (uint8_t)(field - 4u);
        }
        if (field >= SIZES) {
            return false;
        }
        rr_voice_u32(voice, sizes[field]);
        return true;
    }
}

/* The fields of each notice after its tick, a letter each: see `own_field`. */
static const RR_FLASH char fields_of_notices[] = /* boot */ "bc\0" /* who */ "\0" /* stop */ "vs\0" /* off */ "S\0"
                                                 /* trip */ "Tixy\0" /* done */ "h\0" /* dwell */ "iv\0" /* garbled */ "g";
_Static_assert(RR_NOTICE_BOOT == 0 && RR_NOTICE_WHO == 1 && RR_NOTICE_STOP == 2 && RR_NOTICE_OFF == 3 && RR_NOTICE_TRIP == 4 &&
                   RR_NOTICE_DONE == 5 && RR_NOTICE_DWELL == 6 && RR_NOTICE_GARBLED == 7 && RR_NOTICE_COUNT == 8,
               "the notices' order");

/* The fields after word and tick, counted from 0. */
static bool own_field(struct rr_device *device, const struct rr_happened *happened, uint8_t field)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    const struct rr_finding *trip = device->last_trip.trip == happened->index >> 4 ? &device->last_trip : &device->trip_before;
    if (happened->kind == RR_NOTICE_WHO) {
        return rr_notice_identity_field(device, field);
    }
    const RR_FLASH char *letter = rr_names_at(fields_of_notices, happened->kind);
    while (field-- != 0 && *letter != '\0') {
        letter++;
    }
    switch (*letter) {
    case 'b':
        rr_voice_u32(voice, device->boot);
        break;
    case 'c':
        say_name(voice, causes, happened->index);
        break;
    case 'v':
        rr_voice_u32(voice, happened->value);
        break;
    case 's':
        say_name(voice, sources, happened->index);
        break;
    case 'S':
        say_name(voice, states, happened->index);
        break;
    case 'T':
        say_name(voice, trips, happened->index >> 4);
        break;
    case 'i':
        rr_voice_u32(voice, happened->index & 0xFu);
        break;
    case 'x':
        rr_voice_i32(voice, trip->value);
        break;
    case 'y':
        rr_voice_i32(voice, trip->bound);
        break;
    case 'h':
        rr_voice_hex2(voice, ' ', happened->index);
        break;
    case 'g':
        rr_voice_u32(voice, device->garbled_told);
        break;
    default:
        return false;
    }
    return true;
}

bool rr_notice_field(struct rr_device *device, uint8_t field)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    const struct rr_happened *happened = &device->notices.happened[device->notices.first];
    switch (field) {
    case 0:
        rr_voice_hex2(voice, 'N', happened->number);
        return true;
    case 1:
        say_name(voice, names, happened->kind);
        return true;
    case 2:
        rr_voice_u32(voice, device->tick - (uint16_t)((uint16_t)device->tick - happened->tick_low));
        return true;
    default:
        return own_field(device, happened, (uint8_t)(field - 3u));
    }
}

void rr_notice_push(struct rr_device *device, uint8_t kind, uint8_t index, uint16_t value)
{
    struct rr_notices *notices = RR_NEAR(&device->notices);
    uint8_t number = notices->number++;
    bool taking = !RR_SPREAD && device->taking;
    if (taking) {
        device->taking = false;
    }
    while (notices->count == RR_NOTICES && rr_device_say(device)) { /* a flood in one tick: told early */
    }
    if (taking) {
        device->taking = true;
    }
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
