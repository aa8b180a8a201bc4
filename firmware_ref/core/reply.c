/* Answers as numbers, and the fields they are said in (SPEC section 8). */
#include "device.h"
#include "kept.h"
#include "names.h"

#include <stddef.h>

static const RR_FLASH char reasons[] = RR_REASON_LIST(RR_NAME);
static const RR_FLASH char ok[] = "ok";
static const RR_FLASH char no[] = "no";

/* What the numbers of an `ok` are, by words: u unsigned, i signed, S a state, T a trip; the last one goes on for all that
 * follow it. `who` says its fields itself, `trail` has a payload after its number. */
static const RR_FLASH char kinds[] = /* who */ "\0" /* beat */ "S\0" /* state */ "STui\0" /* arm */ "u\0" /* disarm */ "\0"
                                     /* ramp */ "u\0" /* swing */ "u\0" /* rest */ "u\0" /* stop */ "S\0" /* clear */ "\0"
                                     /* why */ "Tuui\0" /* limit */ "i\0" /* log */ "u\0" /* again */ "\0" /* trail */ "u\0"
                                     /* counters */ "u";
_Static_assert(RR_WORD_BEAT == 1 && RR_WORD_STATE == 2 && RR_WORD_STOP == 8 && RR_WORD_WHY == 10 && RR_WORD_LIMIT == 11 &&
                   RR_WORD_COUNTERS == 15 && RR_WORD_COUNT == 16,
               "the words' order");

/* Numbers of an answer that stand somewhere in the device. */
struct datum {
    uint16_t offset;
    uint8_t width;
};
#define DATUM(member, width) {offsetof(struct rr_device, member), width}
static const RR_FLASH struct datum why[] = {
    DATUM(last_trip.trip, RR_U8),   DATUM(last_trip_tick, RR_I32),  DATUM(last_trip.index, RR_U8),
    DATUM(last_trip.value, RR_I32), DATUM(last_trip.bound, RR_I32),
};
static const RR_FLASH struct datum counters[] = {
    DATUM(lines, RR_I32),   DATUM(line.garbled, RR_I32), DATUM(line.overlong, RR_I32),
    DATUM(lines, RR_I32), /* for what the port counts */
    DATUM(repeats, RR_I32), DATUM(lines, RR_I32), /* and measures */
    DATUM(logging.made_ever, RR_I32), DATUM(logging.dropped_ever, RR_I32), DATUM(inputs.illegal_edges, RR_I32),
};
#define ROWS(table) (sizeof(table) / sizeof(table)[0])

static void note(struct rr_device *device, const RR_FLASH struct datum *datum, uint8_t rows)
{
    struct rr_reply *reply = RR_NEAR(&device->memory.reply);
    uint32_t *value = reply->value;
    reply->count = rows;
    for (; rows != 0; rows--, datum++) {
        *value++ = (uint32_t)rr_kept_read((const uint8_t *)device + datum->offset, datum->width);
    }
}

/* The channels that `state` tells, in its order. */
#define AN_AXIS(first)  first + RR_CHANNEL_DUTY, first + RR_CHANNEL_COUNTS, first + RR_CHANNEL_CURRENT_MA
static const RR_FLASH uint8_t channels_of_state[] = {
    RR_CHANNEL_SUPPLY_MV,
    RR_CHANNEL_TEMPERATURE_DC,
    AN_AXIS(0),
#if RR_AXES > 1
    AN_AXIS(3),
#endif
#if RR_AXES > 2
    AN_AXIS(6),
#endif
#if RR_AXES > 3
    AN_AXIS(9),
#endif
#if RR_SERVOS > 0
    RR_CHANNEL_PULSE_US,
#endif
#if RR_SERVOS > 1
    RR_CHANNEL_PULSE_US + 1,
#endif
#if RR_SERVOS > 2
    RR_CHANNEL_PULSE_US + 2,
#endif
#if RR_SERVOS > 3
    RR_CHANNEL_PULSE_US + 3,
#endif
};
#undef AN_AXIS
_Static_assert(sizeof channels_of_state == RR_STATE_VALUES - 3, "state, trip and queue come before them");

static void note_state(struct rr_device *device, uint32_t *value)
{
    *value++ = device->latch.state;
    *value++ = device->latch.trip;
    *value++ = rr_device_queued(device);
    for (uint8_t place = 0; place < sizeof channels_of_state; place++) {
        *value++ = (uint32_t)rr_sampling_channel(device, channels_of_state[place]);
    }
}

void rr_reply_note(struct rr_device *device, uint8_t word, uint32_t told)
{
    struct rr_reply *reply = RR_NEAR(&device->memory.reply);
    reply->count = 1;
    reply->value[0] = told;
    switch (word) {
    case RR_WORD_BEAT:
    case RR_WORD_STOP:
        reply->value[0] = device->latch.state;
        break;
    case RR_WORD_STATE:
        reply->count = RR_STATE_VALUES;
        note_state(device, reply->value);
        break;
    case RR_WORD_WHY:
        note(device, why, ROWS(why));
        break;
    case RR_WORD_LOG:
        reply->value[1] = told;
        reply->value[0] = device->logging.block.period == 0 ? 0 : device->logging.next_tick;
        reply->count = 2;
        break;
    case RR_WORD_COUNTERS:
        note(device, counters, ROWS(counters));
        reply->value[3] = RR_PORT(device)->overruns(RR_SELF(device));
        reply->value[5] = RR_PORT(device)->worst_us(RR_SELF(device));
        break;
    default:
        break;
    }
}

/* Tag, verdict, tick, and the reason of a `no`. False beyond them. */
static bool common_field(struct rr_voice *voice, uint8_t field, const struct rr_verdict *verdict)
{
    bool is_ok = verdict->reason == RR_REASON_COUNT;
    switch (field) {
    case 0:
        rr_voice_hex2(voice, 0, verdict->tag);
        return true;
    case 1:
        rr_voice_word(voice, is_ok ? ok : no);
        return true;
    case 2:
        rr_voice_u32(voice, verdict->tick);
        return true;
    case 3:
        if (is_ok) {
            return false;
        }
        rr_voice_word(voice, rr_names_at(reasons, verdict->reason));
        return true;
    default:
        return false;
    }
}

static bool ok_field(struct rr_device *device, const struct rr_reply *reply, uint8_t number)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    if (reply->word == RR_WORD_WHO) {
        return rr_notice_identity_field(device, number);
    }
    if (number >= reply->count) {
        if (reply->word != RR_WORD_TRAIL || number != 1) {
            return false;
        }
        rr_voice_bits(voice, device->u.packing.bytes, device->u.packing.length);
        return true;
    }
    const RR_FLASH char *kind = rr_names_at(kinds, reply->word);
    for (uint8_t left = number; left != 0 && kind[1] != '\0'; left--) {
        kind++;
    }
    uint32_t value = reply->value[number];
    switch (*kind) {
    case 'u':
        rr_voice_u32(voice, value);
        return true;
    case 'i':
        rr_voice_i32(voice, (int32_t)value);
        return true;
    case 'S':
        rr_notice_say_state(voice, (uint8_t)value);
        return true;
    case 'T':
        rr_notice_say_trip(voice, (uint8_t)value);
        return true;
    default:
        return false;
    }
}

bool rr_reply_field(struct rr_device *device, uint8_t field)
{
    const struct rr_reply *reply = RR_NEAR(&device->memory.reply);
    if (common_field(&device->voice, field, &reply->verdict)) {
        return true;
    }
    return reply->verdict.reason == RR_REASON_COUNT && ok_field(device, reply, (uint8_t)(field - 3u));
}

bool rr_reply_aside_field(struct rr_device *device, uint8_t field)
{
    const struct rr_aside *aside = RR_NEAR(&device->aside);
    if (common_field(&device->voice, field, &aside->verdict)) {
        return true;
    }
    if (aside->verdict.reason != RR_REASON_COUNT || field != 3) {
        return false;
    }
    rr_notice_say_state(&device->voice, aside->state);
    return true;
}
