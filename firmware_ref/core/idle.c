/* What can wait: bytes heard and lines said in pieces, and the chores between (SPEC KIND-3, KIND-4).
 *
 * A fast processor does all of it within the tick (`rr_device_settle`); a small one in its spare time between ticks. */
#include "device.h"
#include "store.h"

/* No notice but `who` is longer: number, word, tick and three signed numbers, with the check. */
#define NOTICE_LONGEST 80u

/* A whole line is judged and read at the latest after this time, well below ANSWER_TICKS. */
#define PATIENCE_TICKS 5u

/* Takes bytes until a line waits to be carried out. To judge a line at its LF is a long piece of work. */
static bool hear(struct rr_device *device, bool long_ones)
{
    for (uint8_t i = 0; i < RR_PIECE; i++) {
        if (device->heard != RR_LINE_NONE || (device->line_ended && !long_ones)) {
            return i != 0;
        }
        int byte = device->line_ended ? '\n' : RR_PORT(device)->read(RR_SELF(device));
        if (byte < 0) {
            return i != 0;
        }
        device->line_ended = byte == '\n' && !long_ones;
        if (!device->line_ended) {
            enum rr_line_kind kind = rr_line_take(&device->line, (uint8_t)byte);
            device->heard = (uint8_t)(kind == RR_LINE_GARBLED ? RR_LINE_NONE : kind);
        }
    }
    return true;
}

/* The line that comes next: answers and notices go first (KIND-4). */
static uint8_t next_line(const struct rr_device *device)
{
    const struct rr_logging *logging = RR_NEAR(&device->logging);
    if (logging->waiting && logging->goes_first) {
        return RR_SAYING_DATA;
    }
    if (device->aside.waiting) {
        return RR_SAYING_ASIDE;
    }
    if (device->memory.reply.waiting && !device->packing_busy) {
        return RR_SAYING_REPLY;
    }
    if (RR_KEEP != 0 && logging->again_waiting && !device->memory.reply.waiting) {
        return RR_SAYING_AGAIN;
    }
    if (device->notices.count != 0 && (RR_SPREAD || !device->taking)) {
        return RR_SAYING_NOTICE;
    }
    return logging->waiting ? RR_SAYING_DATA : RR_SAYING_NOTHING;
}

static bool next_field(struct rr_device *device, uint8_t field)
{
    struct rr_logging *logging = &device->logging;
    switch (device->saying) {
    case RR_SAYING_REPLY:
        return rr_reply_field(device, field);
    case RR_SAYING_ASIDE:
        return rr_reply_aside_field(device, field);
    case RR_SAYING_NOTICE:
        return rr_notice_field(device, field);
    case RR_SAYING_DATA:
        return rr_sampling_field(device, &logging->parcel[logging->saying], field);
    default:
        return rr_sampling_field(device, &logging->parcel[logging->again], field);
    }
}

static void said(struct rr_device *device)
{
    struct rr_notices *notices = RR_NEAR(&device->notices);
    switch (device->saying) {
    case RR_SAYING_REPLY:
        device->memory.reply.waiting = false;
        break;
    case RR_SAYING_ASIDE:
        device->aside.waiting = false;
        break;
    case RR_SAYING_NOTICE:
        notices->first = (uint8_t)(notices->first + 1u == RR_NOTICES ? 0 : notices->first + 1u);
        notices->count--;
        break;
    case RR_SAYING_DATA:
        device->logging.waiting = false;
        device->logging.goes_first = false;
        break;
    default:
        device->logging.again_waiting = false;
        break;
    }
    device->saying = RR_SAYING_NOTHING;
}

/* Begins the next line; a line for which there is no room is passed over whole where it is not said in pieces. */
static bool begin_line(struct rr_device *device)
{
    device->saying = next_line(device);
    while (!RR_SPREAD && device->saying != RR_SAYING_NOTHING) {
        const struct rr_notices *notices = RR_NEAR(&device->notices);
        bool is_short = device->saying == RR_SAYING_NOTICE && notices->happened[notices->first].kind != RR_NOTICE_WHO;
        if (RR_PORT(device)->room(RR_SELF(device)) >= (is_short ? NOTICE_LONGEST : RR_DEVICE_LINE_MAX)) {
            break;
        }
        said(device);
        device->saying = next_line(device);
    }
    rr_voice_begin(&device->voice);
    return device->saying != RR_SAYING_NOTHING;
}

/* The next character of the line under way. */
static char next_character(struct rr_device *device)
{
    struct rr_voice *voice = RR_NEAR(&device->voice);
    while (voice->tail == 0) {
        char c = rr_voice_next(voice);
        if (c != '\0') {
            return c;
        }
        if (!next_field(device, voice->field++)) {
            rr_voice_end(voice);
        }
    }
    char c = rr_voice_tail(voice);
    if (voice->tail == 0) {
        said(device);
    }
    return c;
}

bool rr_device_say(struct rr_device *device)
{
    uint16_t room = RR_PORT(device)->room(RR_SELF(device));
    if (device->saying == RR_SAYING_NOTHING && (room == 0 || !begin_line(device))) {
        return false;
    }
    char piece[RR_PIECE];
    uint8_t length = 0;
    while (length < RR_PIECE && length < room && device->saying != RR_SAYING_NOTHING) {
        piece[length++] = next_character(device);
    }
    if (length != 0) {
        RR_PORT(device)->write(RR_SELF(device), piece, length);
    }
    return length != 0;
}

/* Saves one limit that is not in the store yet; false where there is none, or the store is not ready. */
static bool save(struct rr_device *device)
{
    for (uint8_t i = 0; i < sizeof device->unsaved; i++) {
        if (device->unsaved[i] == 0) {
            continue;
        }
        uint8_t place = (uint8_t)(8u * i);
        uint8_t bit = 1;
        while ((device->unsaved[i] & bit) == 0) {
            bit = (uint8_t)(bit << 1);
            place++;
        }
        if (!rr_store_write(RR_PORT(device), RR_SELF(device), (uint8_t)(1u + place), rr_limits_at(&device->limits, place))) {
            return false;
        }
        device->unsaved[i] = (uint8_t)(device->unsaved[i] & (uint8_t)~bit);
        return true;
    }
    return false;
}

/* One of the pieces that take longer. */
static bool do_long(struct rr_device *device)
{
    if (rr_sampling_step(device)) {
        return true;
    }
    if (device->heard == RR_LINE_REQUEST && !device->read) {
        rr_answer_read(device);
        device->read = true;
        return true;
    }
    if (device->packing_busy) {
        rr_packing_step(device);
        return true;
    }
    return rr_limits_digest_step(&device->limits) || save(device);
}

bool rr_device_idle(struct rr_device *device, bool long_ones)
{
    if (device->line_waits >= PATIENCE_TICKS) { /* fast logging has left no time: late rather than never */
        long_ones = true;
        device->line_waits = 0;
    }
    bool heard = hear(device, long_ones);
    if (long_ones && do_long(device)) {
        return true;
    }
    bool spoke = rr_device_say(device);
    return heard || spoke;
}

/* Whether a piece of work other than to hear waits: mostly none does, four times a tick. */
static bool is_busy(const struct rr_device *device)
{
    const struct rr_logging *logging = RR_NEAR(&device->logging);
    if (device->saying != RR_SAYING_NOTHING || device->heard != RR_LINE_NONE || device->notices.count != 0 ||
        device->memory.reply.waiting || device->aside.waiting || device->packing_busy || logging->waiting ||
        logging->again_waiting || logging->taken || logging->flush_due || device->limits.digest_place != RR_LIMITS) {
        return true;
    }
    uint8_t unsaved = 0;
    for (uint8_t i = 0; i < sizeof device->unsaved; i++) {
        unsaved = (uint8_t)(unsaved | device->unsaved[i]);
    }
    return unsaved != 0;
}

void rr_device_settle(struct rr_device *device)
{
    while (!RR_SPREAD && (is_busy(device) ? rr_device_idle(device, true) : hear(device, true))) {
    }
}
