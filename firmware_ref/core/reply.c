/* Answers as numbers, and the fields they are said in (SPEC section 8). */
#include "device.h"

struct name {
    char text[7];
};
#define NAME(NAME_, word) {word},
static const RR_FLASH struct name reason_names[] = {RR_REASON_LIST(NAME)};
#undef NAME

/* What the numbers of an `ok` are: u unsigned, i signed, S a state, T a trip. `state` goes on with three signed ones an
 * axis and an unsigned one a servo; `who` and `trail` are told apart. */
struct form {
    char kinds[10];
};
static const RR_FLASH struct form forms[RR_WORD_COUNT] = {
    [RR_WORD_BEAT] = {"S"},      [RR_WORD_STATE] = {"STuii"}, [RR_WORD_ARM] = {"u"},   [RR_WORD_RAMP] = {"u"},
    [RR_WORD_SWING] = {"u"},     [RR_WORD_REST] = {"u"},      [RR_WORD_STOP] = {"S"},  [RR_WORD_WHY] = {"Tuuii"},
    [RR_WORD_LIMIT] = {"i"},     [RR_WORD_LOG] = {"uu"},      [RR_WORD_TRAIL] = {"u"}, [RR_WORD_COUNTERS] = {"uuuuuuuuu"},
};

static const RR_FLASH char ok[] = "ok";
static const RR_FLASH char no[] = "no";

static void note_state(struct rr_device *device, uint32_t *value)
{
    *value++ = device->latch.state;
    *value++ = device->latch.trip;
    *value++ = rr_device_queued(device);
    *value++ = (uint32_t)device->inputs.supply_mv;
    *value++ = (uint32_t)(int32_t)device->inputs.temperature_dc;
    for (uint8_t i = 0; i < RR_AXES; i++) {
        *value++ = (uint32_t)(int32_t)device->axis[i].chain.duty;
        *value++ = (uint32_t)device->inputs.counts[i];
        *value++ = (uint32_t)device->inputs.current_ma[i];
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        *value++ = rr_servo_us(device->servo[i].pulse_ns);
    }
#endif
}

static void note_counters(struct rr_device *device, uint32_t *value)
{
    value[0] = device->lines;
    value[1] = device->line.garbled;
    value[2] = device->line.overlong;
    value[3] = device->port->overruns(device->self);
    value[4] = device->repeats;
    value[5] = device->port->worst_us(device->self);
    value[6] = device->logging.made_ever;
    value[7] = device->logging.dropped_ever;
    value[8] = device->inputs.illegal_edges;
}

static void note_why(struct rr_device *device, uint32_t *value)
{
    value[0] = device->last_trip.trip;
    value[1] = device->last_trip_tick;
    value[2] = device->last_trip.index;
    value[3] = (uint32_t)device->last_trip.value;
    value[4] = (uint32_t)device->last_trip.bound;
}

void rr_reply_note(struct rr_device *device, uint8_t word, uint32_t told)
{
    uint32_t *value = device->memory.reply.value;
    switch (word) {
    case RR_WORD_BEAT:
    case RR_WORD_STOP:
        value[0] = device->latch.state;
        break;
    case RR_WORD_STATE:
        note_state(device, value);
        break;
    case RR_WORD_ARM:
        value[0] = device->lease_ms;
        break;
    case RR_WORD_RAMP:
    case RR_WORD_SWING:
    case RR_WORD_REST:
        value[0] = (uint32_t)(RR_QUEUE - rr_device_queued(device));
        break;
    case RR_WORD_WHY:
        note_why(device, value);
        break;
    case RR_WORD_LOG:
        value[0] = device->logging.period == 0 ? 0 : device->logging.next_tick;
        value[1] = told;
        break;
    case RR_WORD_COUNTERS:
        note_counters(device, value);
        break;
    default:
        value[0] = told;
        break;
    }
}

/* Tag, verdict, tick, and the reason of a `no`. False beyond them. */
static bool common_field(struct rr_voice *voice, uint8_t field, uint8_t tag, uint8_t reason, uint32_t tick)
{
    switch (field) {
    case 0:
        rr_voice_hex2(voice, 0, tag);
        return true;
    case 1:
        rr_voice_word(voice, reason == RR_REASON_COUNT ? ok : no);
        return true;
    case 2:
        rr_voice_u32(voice, tick);
        return true;
    default:
        if (field == 3 && reason != RR_REASON_COUNT) {
            rr_voice_word(voice, reason_names[reason].text);
            return true;
        }
        return false;
    }
}

static char kind_of(uint8_t word, uint8_t number)
{
    if (word == RR_WORD_STATE && number >= 5) {
        return number < 5 + 3 * RR_AXES ? 'i' : number < RR_STATE_VALUES ? 'u' : '\0';
    }
    return forms[word].kinds[number];
}

static bool ok_field(struct rr_device *device, const struct rr_reply *reply, uint8_t number)
{
    struct rr_voice *voice = &device->voice;
    if (reply->word == RR_WORD_WHO) {
        return rr_notice_identity_field(device, number);
    }
    if (reply->word == RR_WORD_TRAIL && number == 1) {
        rr_voice_bits(voice, device->u.packing.bytes, device->u.packing.length);
        return true;
    }
    switch (kind_of(reply->word, number)) {
    case 'u':
        rr_voice_u32(voice, reply->value[number]);
        return true;
    case 'i':
        rr_voice_i32(voice, (int32_t)reply->value[number]);
        return true;
    case 'S':
        rr_voice_word(voice, rr_state_word((uint8_t)reply->value[number]));
        return true;
    case 'T':
        rr_voice_word(voice, rr_trip_word((uint8_t)reply->value[number]));
        return true;
    default:
        return false;
    }
}

bool rr_reply_field(struct rr_device *device, uint8_t field)
{
    const struct rr_reply *reply = &device->memory.reply;
    if (common_field(&device->voice, field, reply->tag, reply->reason, reply->tick)) {
        return true;
    }
    return reply->reason == RR_REASON_COUNT && ok_field(device, reply, (uint8_t)(field - 3u));
}

bool rr_reply_aside_field(struct rr_device *device, uint8_t field)
{
    const struct rr_aside *aside = &device->aside;
    if (common_field(&device->voice, field, aside->tag, aside->reason, aside->tick)) {
        return true;
    }
    if (aside->reason != RR_REASON_COUNT || field != 3) {
        return false;
    }
    rr_voice_word(&device->voice, rr_state_word(aside->state));
    return true;
}
