/* Notices, and the words that answers share with them (SPEC section 14). */
#include "device.h"

struct name {
    char text[13];
};

#define NAME2(NAME, word) {word},
#define NAME3(NAME, word, number) {word},
#define NAME4(NAME, word, number, category) {word},
static const struct name notice_names[] = {RR_NOTICE_LIST(NAME2)};
static const struct name state_names[] = {RR_STATE_LIST(NAME3)};
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

void rr_notice_begin(struct rr_device *device, struct rr_out *out, uint8_t notice)
{
    rr_out_begin(out, device->port, device->self, NULL,
                 notice == RR_NOTICE_WHO ? RR_DEVICE_LINE_MAX : NOTICE_LONGEST);
    rr_out_char(out, 'N');
    rr_out_hex2(out, device->notice_number++);
    rr_out_word(out, notice_names[notice].text);
    rr_out_u32(out, device->tick);
}

void rr_notice_off(struct rr_device *device)
{
    struct rr_out out;
    rr_notice_begin(device, &out, RR_NOTICE_OFF);
    rr_out_word(&out, rr_state_word(device->state));
    (void)rr_out_end(&out);
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
