/* Notices: what happened in a tick, told at its end, and the words that answers share with them (SPEC section 14). */
#include "device.h"

struct name {
    char text[13];
};

#define NAME2(NAME, word) {word},
#define NAME3(NAME, word, number) {word},
#define NAME4(NAME, word, number, category) {word},
static const struct name notice_names[] = {RR_NOTICE_LIST(NAME2)};
static const struct name state_names[] = {RR_STATE_LIST(NAME3)};
static const struct name source_names[] = {RR_SOURCE_LIST(NAME3)};
static const struct name cause_names[] = {RR_CAUSE_LIST(NAME3)};
static const struct name trip_names[] = {RR_TRIP_LIST(NAME4)};

/* No notice but `who` is longer: number, word, tick and three signed numbers, with the check. */
#define NOTICE_LONGEST 80u

const char *rr_state_word(uint8_t state)
{
    return state_names[state].text;
}

const char *rr_trip_word(uint8_t trip)
{
    return trip_names[trip].text;
}

void rr_notice_identity(const struct rr_device *device, struct rr_out *out)
{
    rr_out_u32(out, RR_VERSION);
    rr_out_word(out, device->port->firmware);
    rr_out_word(out, device->port->board);
    rr_out_word(out, device->port->serial);
    rr_out_u32(out, device->boot);
    rr_out_u32(out, RR_TICK_US);
    rr_out_u32(out, RR_AXES);
    rr_out_u32(out, RR_SERVOS);
    rr_out_u32(out, RR_MAX_DUTY);
    rr_out_u32(out, RR_QUEUE);
    rr_out_u32(out, RR_TRAIL);
    rr_out_u32(out, RR_KEEP);
    rr_out_u32(out, RR_CAPS);
}

static void send_one(struct rr_device *device, const struct rr_happened *happened)
{
    struct rr_out out;
    rr_out_begin(&out, device->port, device->self, NULL,
                 happened->kind == RR_NOTICE_WHO ? RR_DEVICE_LINE_MAX : NOTICE_LONGEST);
    rr_out_char(&out, 'N');
    rr_out_hex2(&out, device->notices.number++);
    rr_out_word(&out, notice_names[happened->kind].text);
    rr_out_u32(&out, device->tick);
    switch (happened->kind) {
    case RR_NOTICE_BOOT:
        rr_out_u32(&out, device->boot);
        rr_out_word(&out, cause_names[happened->index].text);
        break;
    case RR_NOTICE_WHO:
        rr_notice_identity(device, &out);
        break;
    case RR_NOTICE_STOP:
        rr_out_u32(&out, (uint32_t)happened->value);
        rr_out_word(&out, source_names[happened->index].text);
        break;
    case RR_NOTICE_OFF:
        rr_out_word(&out, rr_state_word(happened->index));
        break;
    case RR_NOTICE_TRIP:
        rr_out_word(&out, rr_trip_word((uint8_t)device->last_trip.trip));
        rr_out_u32(&out, happened->index);
        rr_out_i32(&out, happened->value);
        rr_out_i32(&out, happened->bound);
        break;
    case RR_NOTICE_DONE:
        rr_out_char(&out, ' ');
        rr_out_hex2(&out, happened->index);
        break;
    case RR_NOTICE_DWELL:
        rr_out_u32(&out, happened->index);
        rr_out_u32(&out, (uint32_t)happened->value);
        break;
    default:
        rr_out_u32(&out, (uint32_t)happened->value);
        break;
    }
    (void)rr_out_end(&out);
}

void rr_notice_send(struct rr_device *device)
{
    for (uint8_t i = 0; i < device->notices.count; i++) {
        send_one(device, &device->notices.happened[i]);
    }
    device->notices.count = 0;
}

void rr_notice_push(struct rr_device *device, uint8_t kind, uint8_t index, int32_t value, int32_t bound)
{
    if (device->notices.count == RR_NOTICES) {
        rr_notice_send(device); /* a flood of requests in one tick: early, but none is lost */
    }
    struct rr_happened *happened = &device->notices.happened[device->notices.count++];
    happened->kind = kind;
    happened->index = index;
    happened->value = value;
    happened->bound = bound;
}
