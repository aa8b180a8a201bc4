/* The requests: each word's checks in the order of SPEC BAD-5, and what it does (SPEC section 8). */
#include "device.h"
#include "kept.h"
#include "seeded.h"
#include "store.h"

#define WORD_OK RR_REASON_COUNT

static bool ramp_is_out(const struct rr_device *device, const struct rr_arguments *given)
{
    uint16_t ceiling = (uint16_t)rr_limits_at(&device->limits, rr_limits_axis_place(RR_LIMIT_CEILING_DUTY, (uint8_t)given->value[0]));
    /* from -ceiling to ceiling, moved to start from 0 */
    return given->value[1] + ceiling > 2ul * ceiling || given->value[2] > RR_HORIZON_TICKS;
}

static bool swing_is_out(const struct rr_device *device, const struct rr_arguments *given)
{
    uint8_t servo = (uint8_t)given->value[0];
    uint32_t pulse_us = given->value[1];
    if (pulse_us == 0) {
        return given->value[2] != 0;
    }
    return pulse_us > (uint32_t)rr_limits_at(&device->limits, rr_limits_servo_place(RR_LIMIT_PULSE_MAX_US, servo)) ||
           pulse_us < (uint32_t)rr_limits_at(&device->limits, rr_limits_servo_place(RR_LIMIT_PULSE_MIN_US, servo)) ||
           given->value[2] > RR_HORIZON_TICKS;
}

static bool log_is_out(const struct rr_arguments *given)
{
    uint32_t mask = given->value[1];
    if (given->value[0] == 0) {
        return mask != 0 || (uint8_t)given->value[2] != RR_FORM_PACKED;
    }
    return given->value[0] > UINT16_MAX || mask == 0 || !rr_sampling_mask_fits(mask);
}

static bool arm_is_out(const struct rr_device *device, const struct rr_arguments *given)
{
    return given->value[0] < 50 ||
           given->value[0] > (uint32_t)rr_limits_at(&device->limits, rr_limits_row(RR_LIMIT_LEASE_MS));
}

/* The index of an axis, servo or limit first, then the range of what else is given. */
static uint8_t refusal(const struct rr_device *device, struct rr_request *request)
{
    const struct rr_arguments *given = &request->given;
    uint32_t index = given->count == 0 ? 0 : given->value[0];
    bool missing = false;
    bool out = false;
    switch (request->word) {
    case RR_WORD_ARM:
        out = arm_is_out(device, given);
        break;
    case RR_WORD_RAMP:
        missing = index >= RR_AXES;
        out = !missing && ramp_is_out(device, given);
        break;
    case RR_WORD_REST:
    case RR_WORD_TRAIL:
        missing = index >= RR_AXES;
        break;
    case RR_WORD_SWING:
        missing = rr_limits_place(RR_LIMIT_PULSE_MIN_US, index) == RR_LIMITS;
        out = !missing && swing_is_out(device, given);
        break;
    case RR_WORD_STOP:
        out = index > 1;
        break;
    case RR_WORD_LOG:
        out = log_is_out(given);
        break;
    case RR_WORD_AGAIN:
        out = index > 255;
        break;
    case RR_WORD_LIMIT:
        request->place = rr_limits_place_in_row((uint8_t)index, given->value[1]);
        missing = request->place == RR_LIMITS;
        out = !missing && given->count == 3 && rr_limits_is_out(&device->limits, request->place, (int32_t)given->value[2]);
        break;
    default:
        break;
    }
    if (missing) {
        return RR_REASON_INDEX;
    }
    return out ? RR_REASON_RANGE : WORD_OK;
}

static uint8_t do_arm(struct rr_device *device, const struct rr_arguments *given, uint32_t *told)
{
    if (RR_SEEDED(ARM_ON_ANY_DIGEST, false, given->value[1] != device->limits.digest)) {
        return RR_REASON_DIGEST;
    }
    *told = given->value[0];
    device->lease_ms = (uint16_t)given->value[0];
    device->lease_ticks = 1000u % RR_TICK_US == 0
                              ? (uint16_t)(given->value[0] * (1000u / RR_TICK_US))
                              : (uint16_t)((given->value[0] * 1000u + RR_TICK_US - 1u) / RR_TICK_US);
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
    device->u.orders.count = 0;
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
static uint8_t do_order(struct rr_device *device, uint8_t kind, const struct rr_arguments *given, uint32_t *told)
{
    const uint32_t *value = given->value;
    bool is_rest = kind == RR_ORDER_REST;
    uint32_t start = value[is_rest ? 2 : 3];
    int32_t ahead = (int32_t)(start - device->tick);
    if (RR_SEEDED(LATE_ORDER_CARRIED_OUT, false, ahead <= 0)) {
        if (device->late_by < 0) {
            device->late_by = ahead == INT32_MIN ? INT32_MAX : -ahead;
        }
        return RR_REASON_LATE;
    }
    if (ahead > (int32_t)RR_HORIZON_TICKS) {
        return RR_REASON_FAR;
    }
    if (device->u.orders.count == RR_QUEUE) {
        return RR_REASON_FULL;
    }
    struct rr_order order = {
        .start = RR_SEEDED(LATE_ORDER_CARRIED_OUT, ahead < 0 ? device->tick : start, start),
        .ticks = is_rest ? 0 : value[2],
        .value = (int16_t)value[1],
        .kind_index = (uint8_t)(kind << 4 | (uint8_t)value[0]),
        .tag = device->line.tag,
    };
    rr_orders_add(&device->u.orders, &order, device->tick);
    *told = (uint8_t)(RR_QUEUE - device->u.orders.count);
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
    RR_SUPPLY supply = device->inputs.supply_mv;
    uint8_t axis = RR_AXIS(device->last_trip.index);
    bool persists = trip == RR_TRIP_SELF_TEST ||
                    (trip == RR_TRIP_OVERVOLTAGE && supply > device->limits.board.over_mv) ||
                    (trip == RR_TRIP_UNDERVOLTAGE && supply < device->limits.board.under_mv) ||
                    rr_guard_persists(&device->axis[axis].guard, &device->limits.axis[axis].guard, trip,
                                             device->inputs.current_ma[axis]);
    if (RR_SEEDED(CLEAR_DESPITE_CAUSE, false, persists)) {
        return RR_REASON_CAUSE;
    }
    rr_latch_clear(&device->latch);
    return WORD_OK;
}

/* `told` is the value then in force, or from the next tick on. */
static uint8_t do_limit(struct rr_device *device, uint8_t place, const struct rr_arguments *given, uint32_t *told)
{
    bool live = RR_SEEDED(LOOSER_WHILE_ARMED, false, rr_latch_is_live(&device->latch));
    int32_t now = rr_limits_at(&device->limits, place);
    int32_t value = (int32_t)given->value[2];
    *told = (uint32_t)now;
    if (given->count < 3 || value == now) {
        return WORD_OK;
    }
    if (live && rr_limits_is_looser(&device->limits, place, now, value)) {
        return RR_REASON_ARMED;
    }
    *told = (uint32_t)value;
    rr_limits_set(&device->limits, place, value);
    if ((RR_CAPS & RR_CAP_KEEPS_LIMITS) != 0) {
        uint8_t *byte = &device->unsaved[place >> 3];
        *byte = (uint8_t)(*byte | (uint8_t)(1u << (place & 7u)));
    }
    return WORD_OK;
}

/* Carries out a word whose arguments are in range and whose state is right. Fields that only it can tell go to `told`. */
static uint8_t carry_out(struct rr_device *device, uint8_t word, const struct rr_arguments *given, uint32_t *told)
{
    const uint32_t *value = given->value;
    switch (word) {
    case RR_WORD_ARM:
        return do_arm(device, given, told);
    case RR_WORD_DISARM:
        return do_disarm(device);
    case RR_WORD_RAMP:
    case RR_WORD_SWING:
    case RR_WORD_REST:
        return do_order(device, (uint8_t)(word - RR_WORD_RAMP + RR_ORDER_RAMP), given, told);
    case RR_WORD_STOP:
        do_stop(device, (uint8_t)value[0]);
        return WORD_OK;
    case RR_WORD_CLEAR:
        return do_clear(device);
    case RR_WORD_LIMIT:
        return do_limit(device, device->line.u.request.place, given, told);
    case RR_WORD_LOG:
        *told = rr_sampling_change(device, (uint16_t)value[0], value[1], (uint8_t)value[2]);
        return WORD_OK;
    case RR_WORD_AGAIN:
        return rr_sampling_again(device, (uint8_t)value[0]) ? WORD_OK : RR_REASON_GONE;
    case RR_WORD_TRAIL:
        *told = device->trail.held;
        return rr_packing_begin(device, (uint8_t)value[0], value[1]) ? WORD_OK : RR_REASON_GONE;
    default:
        return WORD_OK;
    }
}

_Static_assert(RR_WORD_SWING - RR_WORD_RAMP == RR_ORDER_SWING - RR_ORDER_RAMP &&
                   RR_WORD_REST - RR_WORD_RAMP == RR_ORDER_REST - RR_ORDER_RAMP,
               "the orders' words are in the order of their kinds");

/* The request's word and arguments, and the reason to refuse them, by BAD-5 as far as the state does not matter. */
static uint8_t understood(const struct rr_device *device, const char *text, struct rr_request *request)
{
    const char *rest;
    request->word = rr_fields_word(text, &rest);
    if (request->word == RR_WORD_COUNT) {
        return RR_REASON_WORD;
    }
    if (!rr_fields_arguments(request->word, rest, &request->given)) {
        return RR_REASON_ARGS;
    }
    return refusal(device, request);
}

void rr_answer_read(struct rr_device *device)
{
    const struct rr_memory *memory = RR_NEAR(&device->memory);
    const char *text = rr_line_body(&device->line);
    struct rr_request request;
    request.reason = understood(device, text, &request);
    rr_body_take(&request.body, text);
    request.kept_tag = RR_SEEDED(MEMORY_FORGETS, false, memory->full && memory->reply.verdict.tag == device->line.tag);
    request.repeated = request.kept_tag && rr_body_equals(&memory->body, &request.body);
    device->line.u.request = request;
}

/* Carries out the request; the reason of its refusal, or WORD_OK with the number that only the word can tell. */
static uint8_t carried_out(struct rr_device *device, uint32_t *told)
{
    const struct rr_request *request = RR_NEAR(&device->line.u.request);
    if (request->reason != WORD_OK) {
        return request->reason;
    }
    if (((unsigned)rr_fields_states(request->word) >> device->latch.state & 1u) == 0) {
        return RR_REASON_STATE;
    }
    return carry_out(device, request->word, &request->given, told);
}

RR_APART static void note_verdict(const struct rr_device *device, struct rr_verdict *verdict, uint8_t reason)
{
    verdict->tick = device->tick;
    verdict->tag = device->line.tag;
    verdict->reason = reason;
}

/* An answer outside the exactly-once memory. */
static void answer_aside(struct rr_device *device, uint8_t reason)
{
    struct rr_aside *aside = &device->aside;
    note_verdict(device, &aside->verdict, reason);
    aside->state = device->latch.state;
    aside->waiting = true;
}

static void answer(struct rr_device *device)
{
    struct rr_memory *memory = RR_NEAR(&device->memory);
    uint32_t told = 0;
    memory->full = true;
    memory->body = device->line.u.request.body;
    memory->reply.word = device->line.u.request.word;
    uint8_t reason = carried_out(device, &told);
    note_verdict(device, &memory->reply.verdict, reason);
    memory->reply.waiting = true;
    if (reason == WORD_OK) {
        rr_reply_note(device, memory->reply.word, told);
    }
}

/* Answers wait for one another, and for the digest; an urgent `stop` waits for no answer but its own kind. */
bool rr_answer_may(const struct rr_device *device)
{
    const struct rr_request *request = RR_NEAR(&device->line.u.request);
    const struct rr_logging *logging = RR_NEAR(&device->logging);
    if (!RR_SPREAD && RR_PORT(device)->room(RR_SELF(device)) < RR_DEVICE_LINE_MAX) {
        return false;
    }
    if (device->line.tag == RR_TAG_URGENT || (request->kept_tag && !request->repeated)) {
        return !device->aside.waiting;
    }
    if (request->word == RR_WORD_LOG && (logging->waiting || logging->taken || logging->flush_due)) {
        return false; /* what is held of the old logging comes first (LOG-4), and there is place for one line */
    }
    return !device->memory.reply.waiting && device->limits.digest_place == RR_LIMITS;
}

void rr_answer_request(struct rr_device *device)
{
    const struct rr_request *request = RR_NEAR(&device->line.u.request);
    bool urgent = device->line.tag == RR_TAG_URGENT;
    bool repeated = !urgent && request->repeated;
    uint32_t told;
    if (!repeated || RR_SEEDED(REPEAT_RENEWS, true, false)) {
        device->renewed_low = (uint16_t)device->tick;
    }
    if (urgent) { /* TAG-5 */
        bool is_stop = request->word == RR_WORD_STOP;
        answer_aside(device, is_stop ? carried_out(device, &told) : (uint8_t)RR_REASON_TAG);
    } else if (repeated) {
        rr_kept_count(&device->repeats);
        device->memory.reply.waiting = true;
    } else if (request->kept_tag) { /* TAG-4 */
        answer_aside(device, RR_REASON_TAG);
    } else {
        answer(device);
    }
}
