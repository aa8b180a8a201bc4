/* The requests: each word's checks in the order of SPEC BAD-5, what it does, and its answer (SPEC section 8). */
#include "device.h"
#include "seeded.h"
#include "store.h"

#include <string.h>

#define WORD_OK RR_REASON_COUNT

struct name {
    char text[7];
};
#define NAME(NAME_, word) {word},
static const struct name reason_names[] = {RR_REASON_LIST(NAME)};
#undef NAME

static uint8_t index_refusal(uint8_t word, const struct rr_arguments *given)
{
    switch (word) {
    case RR_WORD_RAMP:
    case RR_WORD_REST:
    case RR_WORD_TRAIL:
        return given->value[0] >= RR_AXES ? RR_REASON_INDEX : WORD_OK;
    case RR_WORD_SWING:
        return rr_limits_place(RR_LIMIT_PULSE_MIN_US, given->value[0]) == RR_LIMITS ? RR_REASON_INDEX : WORD_OK;
    case RR_WORD_LIMIT:
        return rr_limits_place((uint8_t)given->value[0], given->value[1]) == RR_LIMITS ? RR_REASON_INDEX : WORD_OK;
    default:
        return WORD_OK;
    }
}

static bool ramp_is_out(const struct rr_device *device, const struct rr_arguments *given)
{
    int32_t duty = (int32_t)given->value[1];
    int32_t ceiling = rr_limits_get(&device->limits, RR_LIMIT_CEILING_DUTY, (uint8_t)given->value[0]);
    return duty > ceiling || duty < -ceiling || given->value[2] > RR_HORIZON_TICKS;
}

static bool swing_is_out(const struct rr_device *device, const struct rr_arguments *given)
{
#if RR_SERVOS > 0
    uint8_t servo = (uint8_t)given->value[0];
    if (given->value[1] == 0) {
        return given->value[2] != 0;
    }
    return given->value[1] > (uint32_t)rr_limits_get(&device->limits, RR_LIMIT_PULSE_MAX_US, servo) ||
           given->value[1] < (uint32_t)rr_limits_get(&device->limits, RR_LIMIT_PULSE_MIN_US, servo) ||
           given->value[2] > RR_HORIZON_TICKS;
#else
    (void)device;
    (void)given;
    return true;
#endif
}

static bool log_is_out(const struct rr_arguments *given)
{
    if (given->value[0] == 0) {
        return given->value[1] != 0 || given->value[2] != RR_FORM_PACKED;
    }
    return given->value[0] > UINT16_MAX || given->value[1] == 0 || !rr_sampling_mask_fits(given->value[1]);
}

static uint8_t range_refusal(const struct rr_device *device, uint8_t word, const struct rr_arguments *given)
{
    bool out = false;
    switch (word) {
    case RR_WORD_ARM:
        out = given->value[0] < 50 || given->value[0] > (uint32_t)rr_limits_get(&device->limits, RR_LIMIT_LEASE_MS, 0);
        break;
    case RR_WORD_RAMP:
        out = ramp_is_out(device, given);
        break;
    case RR_WORD_SWING:
        out = swing_is_out(device, given);
        break;
    case RR_WORD_STOP:
        out = given->value[0] > 1;
        break;
    case RR_WORD_LOG:
        out = log_is_out(given);
        break;
    case RR_WORD_AGAIN:
        out = given->value[0] > 255;
        break;
    case RR_WORD_LIMIT:
        out = given->count == 3 && rr_limits_refusal(&device->limits, (uint8_t)given->value[0], given->value[1],
                                                     (int32_t)given->value[2], false) == RR_REASON_RANGE;
        break;
    default:
        break;
    }
    return out ? RR_REASON_RANGE : WORD_OK;
}

static uint8_t do_arm(struct rr_device *device, const struct rr_arguments *given)
{
    if (RR_SEEDED(ARM_ON_ANY_DIGEST, false, given->value[1] != rr_limits_digest(&device->limits))) {
        return RR_REASON_DIGEST;
    }
    device->lease_ms = given->value[0];
    device->lease_ticks = (given->value[0] * 1000u + RR_TICK_US - 1u) / RR_TICK_US;
    rr_latch_arm(&device->latch);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        rr_glide_end(&device->axis[i].demand, 0);
        device->axis[i].brake = false;
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        rr_glide_end(&device->servo[i].swing, 0);
    }
#endif
    device->orders.count = 0;
    rr_trail_begin(&device->trail);
    return WORD_OK;
}

static bool at_zero(const struct rr_device *device)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        if (device->axis[i].chain.duty != 0 || device->axis[i].demand.value != 0) {
            return false;
        }
    }
    return true;
}

static uint8_t do_disarm(struct rr_device *device)
{
    if (device->latch.state == RR_STATE_OFF) {
        return WORD_OK;
    }
    if (!at_zero(device)) {
        return RR_REASON_MOVING;
    }
    rr_stop_begin(device, 0, RR_SOURCE_DISARM);
    return WORD_OK;
}

/* ORDER-1, ORDER-2: late before far before full, so that a late order is never hidden. */
static uint8_t do_order(struct rr_device *device, uint8_t kind, int32_t value, uint32_t ticks, uint32_t start,
                        uint8_t index)
{
    int32_t ahead = (int32_t)(start - device->tick);
    if (RR_SEEDED(LATE_ORDER_CARRIED_OUT, false, ahead <= 0)) {
        rr_finding_note(&device->late, RR_TRIP_LATE_ORDER, ahead == INT32_MIN ? INT32_MAX : -ahead, 0);
        return RR_REASON_LATE;
    }
    if (ahead > (int32_t)RR_HORIZON_TICKS) {
        return RR_REASON_FAR;
    }
    if (device->orders.count == RR_QUEUE) {
        return RR_REASON_FULL;
    }
    uint32_t carried_out = RR_SEEDED(LATE_ORDER_CARRIED_OUT, ahead < 0 ? device->tick : start, start);
    struct rr_order order = {carried_out, ticks, value, kind, index, device->line.tag};
    rr_orders_add(&device->orders, &order, device->tick);
    return WORD_OK;
}

static void do_stop(struct rr_device *device, uint8_t category)
{
    if (rr_latch_is_live(&device->latch) && !(device->latch.state == RR_STATE_STOPPING && category == 1)) {
        rr_stop_begin(device, category, RR_SOURCE_HOST);
    }
}

static uint8_t do_clear(struct rr_device *device)
{
    uint8_t trip = device->latch.trip;
    int32_t supply = device->inputs.supply_mv;
    bool persists = trip == RR_TRIP_SELF_TEST ||
                    (trip == RR_TRIP_OVERVOLTAGE && supply > rr_limits_get(&device->limits, RR_LIMIT_OVER_MV, 0)) ||
                    (trip == RR_TRIP_UNDERVOLTAGE && supply < rr_limits_get(&device->limits, RR_LIMIT_UNDER_MV, 0));
    const struct rr_axis *axis = &device->axis[device->last_trip.index];
    persists = persists || rr_guard_persists(&axis->guard, &axis->guard_limits, trip,
                                             device->inputs.current_ma[device->last_trip.index]);
    if (RR_SEEDED(CLEAR_DESPITE_CAUSE, false, persists)) {
        return RR_REASON_CAUSE;
    }
    rr_latch_clear(&device->latch);
    return WORD_OK;
}

static uint8_t do_limit(struct rr_device *device, const struct rr_arguments *given)
{
    bool live = RR_SEEDED(LOOSER_WHILE_ARMED, false, rr_latch_is_live(&device->latch));
    if (given->count < 3) {
        return WORD_OK;
    }
    uint8_t reason = rr_limits_refusal(&device->limits, (uint8_t)given->value[0], given->value[1],
                                       (int32_t)given->value[2], live);
    uint8_t place = rr_limits_place((uint8_t)given->value[0], given->value[1]);
    if (reason != WORD_OK || device->limits.value[place] == (int32_t)given->value[2]) {
        return reason;
    }
    device->limits.value[place] = (int32_t)given->value[2];
    (void)rr_store_write(device->port, device->self, (uint8_t)(1u + place), (int32_t)given->value[2]);
    device->limits_changed = true;
    return WORD_OK;
}

/* Carries out a word whose arguments are in range and whose state is right. Fields that only it can tell go to `told`. */
static uint8_t carry_out(struct rr_device *device, uint8_t word, const struct rr_arguments *given, uint32_t *told)
{
    const uint32_t *value = given->value;
    switch (word) {
    case RR_WORD_ARM:
        return do_arm(device, given);
    case RR_WORD_DISARM:
        return do_disarm(device);
    case RR_WORD_RAMP:
        return do_order(device, RR_ORDER_RAMP, (int32_t)value[1], value[2], value[3], (uint8_t)value[0]);
    case RR_WORD_SWING:
        return do_order(device, RR_ORDER_SWING, (int32_t)(value[1] * 1000u), value[2], value[3], (uint8_t)value[0]);
    case RR_WORD_REST:
        return do_order(device, RR_ORDER_REST, (int32_t)value[1], 0, value[2], (uint8_t)value[0]);
    case RR_WORD_STOP:
        do_stop(device, (uint8_t)value[0]);
        return WORD_OK;
    case RR_WORD_CLEAR:
        return do_clear(device);
    case RR_WORD_LIMIT:
        return do_limit(device, given);
    case RR_WORD_LOG:
        *told = rr_sampling_change(device, (uint16_t)value[0], value[1], (uint8_t)value[2]);
        return WORD_OK;
    case RR_WORD_AGAIN:
        return rr_sampling_again(device, (uint8_t)value[0]) ? WORD_OK : RR_REASON_GONE;
    default:
        return WORD_OK;
    }
}

static void write_state(struct rr_device *device, struct rr_out *out)
{
    rr_out_word(out, rr_state_word(device->latch.state));
    rr_out_word(out, rr_trip_word(device->latch.trip));
    rr_out_u32(out, device->orders.count);
    rr_out_i32(out, device->inputs.supply_mv);
    rr_out_i32(out, device->inputs.temperature_dc);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        rr_out_i32(out, device->axis[i].chain.duty);
        rr_out_i32(out, device->inputs.counts[i]);
        rr_out_i32(out, device->inputs.current_ma[i]);
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        rr_out_u32(out, (uint32_t)device->servo[i].pulse_ns / 1000u);
    }
#endif
}

static void write_counters(struct rr_device *device, struct rr_out *out)
{
    rr_out_u32(out, device->lines);
    rr_out_u32(out, device->line.garbled);
    rr_out_u32(out, device->line.overlong);
    rr_out_u32(out, device->port->overruns(device->self));
    rr_out_u32(out, device->repeats);
    rr_out_u32(out, device->port->worst_us(device->self));
    rr_out_u32(out, device->logging.made_ever);
    rr_out_u32(out, device->logging.dropped_ever);
    rr_out_u32(out, device->inputs.illegal_edges);
}

static void write_why(struct rr_device *device, struct rr_out *out)
{
    rr_out_word(out, rr_trip_word(device->last_trip.trip));
    rr_out_u32(out, device->last_trip_tick);
    rr_out_u32(out, device->last_trip.index);
    rr_out_i32(out, device->last_trip.value);
    rr_out_i32(out, device->last_trip.bound);
}

/* The fields of `ok`. */
static void write_answer(struct rr_device *device, struct rr_out *out, uint8_t word, const struct rr_arguments *given,
                         uint32_t told)
{
    switch (word) {
    case RR_WORD_WHO:
        rr_notice_identity(device, out);
        break;
    case RR_WORD_BEAT:
    case RR_WORD_STOP:
        rr_out_word(out, rr_state_word(device->latch.state));
        break;
    case RR_WORD_STATE:
        write_state(device, out);
        break;
    case RR_WORD_ARM:
        rr_out_u32(out, device->lease_ms);
        break;
    case RR_WORD_RAMP:
    case RR_WORD_SWING:
    case RR_WORD_REST:
        rr_out_u32(out, (uint32_t)(RR_QUEUE - device->orders.count));
        break;
    case RR_WORD_WHY:
        write_why(device, out);
        break;
    case RR_WORD_LIMIT:
        rr_out_i32(out, device->limits.value[rr_limits_place((uint8_t)given->value[0], given->value[1])]);
        break;
    case RR_WORD_LOG:
        rr_out_u32(out, device->logging.period == 0 ? 0 : device->logging.next_tick);
        rr_out_u32(out, told);
        break;
    case RR_WORD_COUNTERS:
        write_counters(device, out);
        break;
    default:
        break;
    }
}

/* The request's word and arguments, or the reason to refuse them, by BAD-5. */
static uint8_t understood(struct rr_device *device, const char *text, uint8_t *word, struct rr_arguments *given)
{
    const char *rest;
    *word = rr_fields_word(text, &rest);
    if (*word == RR_WORD_COUNT) {
        return RR_REASON_WORD;
    }
    if (!rr_fields_arguments(*word, rest, given)) {
        return RR_REASON_ARGS;
    }
    uint8_t reason = index_refusal(*word, given);
    if (reason == WORD_OK) {
        reason = range_refusal(device, *word, given);
    }
    if (reason == WORD_OK && (rr_fields_states(*word) >> device->latch.state & 1u) == 0) {
        reason = RR_REASON_STATE;
    }
    return reason;
}

static void begin_answer(struct rr_device *device, struct rr_out *out, char *copy, bool ok)
{
    rr_out_begin(out, device->port, device->self, copy, RR_DEVICE_LINE_MAX);
    rr_out_hex2(out, device->line.tag);
    rr_out_word(out, ok ? "ok" : "no");
    rr_out_u32(out, device->tick);
}

static void refuse(struct rr_device *device, char *copy, uint8_t reason)
{
    struct rr_out out;
    begin_answer(device, &out, copy, false);
    rr_out_word(&out, reason_names[reason].text);
    uint8_t length = rr_out_end(&out);
    if (copy != NULL) {
        device->memory.answer_length = length;
    }
}

/* `trail` makes its payload where its kept answer's end will be, and moves it into place as it is written. */
static void answer_trail(struct rr_device *device, const struct rr_arguments *given)
{
    char *payload = device->memory.answer + RR_DEVICE_LINE_MAX - RR_TRAIL_PAYLOAD_MAX;
    uint8_t length = rr_sampling_trail(device, (uint8_t)given->value[0], given->value[1], payload);
    if (length == 0) {
        refuse(device, device->memory.answer, RR_REASON_GONE);
        return;
    }
    struct rr_out out;
    begin_answer(device, &out, device->memory.answer, true);
    rr_out_u32(&out, device->trail.held);
    rr_out_char(&out, ' ');
    for (uint8_t i = 0; i < length; i++) {
        rr_out_char(&out, payload[i]);
    }
    device->memory.answer_length = rr_out_end(&out);
}

static void answer(struct rr_device *device, const char *text, char *copy)
{
    uint8_t word;
    struct rr_arguments given;
    uint32_t told = 0;
    uint8_t reason = understood(device, text, &word, &given);
    if (reason == WORD_OK && word == RR_WORD_TRAIL) {
        answer_trail(device, &given);
        return;
    }
    if (reason == WORD_OK) {
        reason = carry_out(device, word, &given, &told);
    }
    if (reason != WORD_OK) {
        refuse(device, copy, reason);
        return;
    }
    struct rr_out out;
    begin_answer(device, &out, copy, true);
    write_answer(device, &out, word, &given, told);
    uint8_t length = rr_out_end(&out);
    if (copy != NULL) {
        device->memory.answer_length = length;
    }
    if (word == RR_WORD_AGAIN) {
        rr_sampling_send_again(device, (uint8_t)given.value[0]);
    }
}

/* TAG-5: `stop` under tag ff, outside the memory. */
static void answer_urgent(struct rr_device *device, const char *text)
{
    const char *rest;
    device->renewed = device->tick;
    if (rr_fields_word(text, &rest) != RR_WORD_STOP) {
        refuse(device, NULL, RR_REASON_TAG);
        return;
    }
    answer(device, text, NULL);
}

void rr_answer_request(struct rr_device *device)
{
    struct rr_memory *memory = &device->memory;
    const char *body = device->line.text;
    const char *text = device->line.body > 2 ? body + 3 : body + 2;
    if (device->line.tag == RR_TAG_URGENT) {
        answer_urgent(device, text);
        return;
    }
    if (RR_SEEDED(MEMORY_FORGETS, false, memory->answer_length != 0 && memory->tag == device->line.tag)) {
        if (strcmp(memory->body, text) == 0) {
            device->repeats++;
            if (RR_SEEDED(REPEAT_RENEWS, true, false)) {
                device->renewed = device->tick;
            }
            device->port->write(device->self, memory->answer, memory->answer_length);
        } else {
            device->renewed = device->tick;
            refuse(device, NULL, RR_REASON_TAG);
        }
        return;
    }
    device->renewed = device->tick;
    memory->tag = device->line.tag;
    strcpy(memory->body, text);
    answer(device, text, memory->answer);
}
