/* One tick of the device, in the order of SPEC RUN-2; see device.h. */
#include "device.h"

#include "kept.h"
#include "seeded.h"
#include "store.h"

#include <string.h>

static bool is_live(const struct rr_device *device)
{
    return rr_latch_is_live(&device->latch);
}

uint8_t rr_device_queued(const struct rr_device *device)
{
    return device->latch.state == RR_STATE_ARMED ? device->u.orders.count : 0;
}

/* Carries out the line that was heard. */
static void carry_out_line(struct rr_device *device)
{
    rr_kept_count(&device->lines);
    switch (device->heard) {
    case RR_LINE_REQUEST:
        rr_answer_request(device);
        break;
    case RR_LINE_BARE_STOP:
        if (is_live(device)) {
            rr_stop_begin(device, 0, RR_SOURCE_BARE);
        } else {
            rr_notice_push(device, RR_NOTICE_OFF, device->latch.state, 0);
        }
        break;
    default:
        rr_notice_push(device, RR_NOTICE_WHO, 0, 0);
        break;
    }
    device->heard = RR_LINE_NONE;
    device->read = false;
}

/* Where work is spread a tick takes one request, and its notices need not wait. */
static void set_taking(struct rr_device *device, bool taking)
{
    if (!RR_SPREAD) {
        device->taking = taking;
    }
}

/* (a) The requests that have arrived and can be answered; one a tick where work is spread. */
static void take_requests(struct rr_device *device)
{
    set_taking(device, true);
    do {
        rr_device_settle(device);
        if (device->heard == RR_LINE_NONE || (device->heard == RR_LINE_REQUEST && !(device->read && rr_answer_may(device)))) {
            break;
        }
        carry_out_line(device);
    } while (!RR_SPREAD);
    rr_device_settle(device);
    set_taking(device, false);
}

/* BAD-4: at most one notice in GARBLED_REST_TICKS; what came inside the rest is told when it is over. */
static void tell_garbled(struct rr_device *device)
{
    if (device->garbled_rest != 0) {
        device->garbled_rest--;
    }
    if (device->garbled_rest != 0 || (uint16_t)device->line.garbled == (uint16_t)device->garbled_told) {
        return;
    }
    device->garbled_told = device->line.garbled;
    device->garbled_rest = RR_GARBLED_REST_TICKS;
    rr_notice_push(device, RR_NOTICE_GARBLED, 0, 0);
}
_Static_assert(RR_GARBLED_REST_TICKS <= 255, "garbled_rest is a byte");

/* (b) */
static void read_inputs(struct rr_device *device)
{
    RR_PORT(device)->inputs(RR_SELF(device), &device->inputs);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        device->inputs.current_ma[i] = (RR_CURRENT)(device->inputs.current_ma[i] - device->limits.axis[i].guard.offset_ma);
        rr_chain_watch(&device->axis[i].chain, &device->limits.axis[i].chain, device->inputs.counts[i]);
    }
}

static uint16_t counted(uint16_t ticks, bool beyond)
{
    if (!beyond) {
        return 0;
    }
    return ticks == UINT16_MAX ? ticks : (uint16_t)(ticks + 1u);
}

/* TRIP-4 */
static void judge_supply(struct rr_device *device, struct rr_finding *finding)
{
    const struct rr_board_limits *limits = RR_NEAR(&device->limits.board);
    if ((RR_CAPS & RR_CAP_SUPPLY) == 0) {
        return;
    }
    RR_SUPPLY supply = device->inputs.supply_mv;
    device->over_for = counted(device->over_for, supply > limits->over_mv);
    device->under_for = counted(device->under_for, supply < limits->under_mv);
    if (device->over_for >= limits->supply_ticks) {
        rr_finding_note(finding, RR_TRIP_OVERVOLTAGE, supply, limits->over_mv);
    }
    if (device->under_for >= limits->supply_ticks) {
        rr_finding_note(finding, RR_TRIP_UNDERVOLTAGE, supply, limits->under_mv);
    }
}

/* LEASE-2 */
static void judge_lease(const struct rr_device *device, struct rr_finding *finding)
{
    uint16_t silent = (uint16_t)((uint16_t)device->tick - device->renewed_low); /* armed: no more than the lease */
    if (RR_SEEDED(LEASE_FORGOTTEN, false, device->latch.state == RR_STATE_ARMED) && silent >= device->lease_ticks) {
        uint32_t silent_ms = RR_TICK_US == 1000 ? silent : (uint32_t)silent * RR_TICK_US / 1000u;
        rr_finding_note(finding, RR_TRIP_LINK_LOST, (int32_t)silent_ms, (int32_t)device->lease_ms);
    }
}

/* (c) The guard: all findings of this tick, of which the lowest number latches (TRIP-1). */
static void guard(struct rr_device *device)
{
    struct rr_finding finding = {RR_TRIP_NONE, 0, 0, 0};
    if (device->late_by >= 0) {
        rr_finding_note(&finding, RR_TRIP_LATE_ORDER, device->late_by, 0);
        device->late_by = -1;
    }
    if (RR_PORT(device)->took_break(RR_SELF(device))) {
        rr_finding_note(&finding, RR_TRIP_LINE_BREAK, 0, 0);
    }
    judge_supply(device, &finding);
    judge_lease(device, &finding);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        struct rr_axis *axis = RR_NEAR(&device->axis[i]);
        uint8_t before = finding.trip;
        rr_guard_step(&axis->guard, &device->limits.axis[i].guard, device->tick, axis->chain.duty, device->inputs.counts[i],
                      device->inputs.current_ma[i], &finding);
        if (finding.trip != before) {
            finding.index = i;
        }
    }
    if (finding.trip != RR_TRIP_NONE) {
        rr_stop_trip(device, &finding);
    }
}

static void begin_swing(struct rr_device *device, const struct rr_order *order, uint8_t index)
{
#if RR_SERVOS > 0
    struct rr_servo *servo = RR_NEAR(&device->servo[index]);
    if (servo->swing.value == 0) { /* no pulse: from home, or on from where pulses were taken away in this tick */
        rr_ns from = servo->pulse_ns != 0 ? servo->pulse_ns : rr_servo_first_ns(&device->limits.servo[index]);
        rr_glide_end(&servo->swing, from);
    }
    rr_glide_begin(&servo->swing, order, (rr_ns)((uint32_t)(uint16_t)order->value * 1000u));
#else
    (void)device;
    (void)order;
    (void)index;
#endif
}

static void begin_order(struct rr_device *device, const struct rr_order *order)
{
    uint8_t index = order->kind_index & 0xFu;
    switch (order->kind_index >> 4) {
    case RR_ORDER_RAMP:
        rr_glide_begin(&device->axis[index].demand, order, order->value);
        break;
    case RR_ORDER_SWING:
        begin_swing(device, order, index);
        break;
    default:
        device->axis[index].brake = order->value == RR_REST_BRAKE;
        rr_notice_push(device, RR_NOTICE_DONE, order->tag, 0);
        break;
    }
}

/* (d) Glides move on, then the orders of this tick begin at their k = 0. */
static void move_demands(struct rr_device *device)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        rr_glide_step(&device->axis[i].demand);
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        rr_glide_step(&device->servo[i].swing);
    }
#endif
    const struct rr_order *order = NULL;
    while (device->latch.state == RR_STATE_ARMED &&
           (order = rr_orders_take_due(&device->u.orders, device->tick)) != NULL) {
        begin_order(device, order);
    }
}

/* (e) for one axis: chain and bridge. */
static void drive_axis(struct rr_device *device, uint8_t index)
{
    struct rr_axis *axis = RR_NEAR(&device->axis[index]);
    struct rr_chain_news news;
    int16_t duty = rr_chain_step(&axis->chain, &device->limits.axis[index].chain, (int16_t)axis->demand.value, &news);
    RR_PORT(device)->bridge(RR_SELF(device), index, duty, axis->brake);
    device->at_ceiling |= news.at_ceiling;
    device->at_slew |= news.at_slew;
    device->locked |= news.locked;
    if (news.let_go != 0) {
        rr_notice_push(device, RR_NOTICE_DWELL, index, news.let_go);
    }
    if (axis->demand.pending && axis->demand.left == 0 && news.settled) {
        axis->demand.pending = false;
        rr_notice_push(device, RR_NOTICE_DONE, axis->demand.tag, 0);
    }
}

#if RR_SERVOS > 0
/* (e) for one servo. */
static void drive_servo(struct rr_device *device, uint8_t index)
{
    struct rr_servo *servo = RR_NEAR(&device->servo[index]);
    const struct rr_servo_limits *limits = &device->limits.servo[index];
    rr_ns goal = servo->swing.value;
    rr_ns before = servo->pulse_ns;
    if (goal == 0) {
        servo->pulse_ns = 0;
    } else if (servo->pulse_ns == 0) {
        servo->pulse_ns = rr_servo_first_ns(limits);
    } else {
        servo->pulse_ns = rr_servo_step_ns(limits, servo->pulse_ns, goal);
    }
    if (servo->pulse_ns != before) {
        RR_PORT(device)->pulse(RR_SELF(device), index, (uint32_t)servo->pulse_ns);
    }
    if (goal != 0 && servo->pulse_ns != rr_servo_held_ns(limits, goal)) {
        device->at_slew = true;
    }
    if (servo->swing.pending && servo->swing.left == 0 && servo->pulse_ns == goal) {
        servo->swing.pending = false;
        rr_notice_push(device, RR_NOTICE_DONE, servo->swing.tag, 0);
    }
}
#endif

/* (e) */
static void drive(struct rr_device *device)
{
    device->at_ceiling = false;
    device->at_slew = false;
    device->locked = false;
    if (!is_live(device)) {
        for (uint8_t i = 0; i < RR_AXES; i++) {
            rr_chain_off(&device->axis[i].chain);
        }
        return;
    }
    bool turning = false;
    for (uint8_t i = 0; i < RR_AXES; i++) {
        drive_axis(device, i);
        turning |= device->axis[i].chain.duty != 0;
    }
#if RR_SERVOS > 0
    for (uint8_t i = 0; i < RR_SERVOS; i++) {
        drive_servo(device, i);
    }
#endif
    if (rr_latch_stop_is_over(&device->latch, device->tick, device->limits.board.stop_ticks, turning)) {
        for (uint8_t i = 0; i < RR_AXES; i++) {
            if (device->axis[i].chain.duty != 0) { /* cut now: this tick is the first to end at zero */
                rr_chain_off(&device->axis[i].chain);
            }
        }
        rr_stop_off(device);
        device->at_ceiling = false; /* in states off and tripped the bits are 0 */
        device->at_slew = false;
        device->locked = false;
    }
}

/* (g) */
static void record(struct rr_device *device)
{
    if (rr_trail_wants(&device->trail, is_live(device))) {
        struct rr_record *record = rr_trail_add(&device->trail, device->tick);
        for (uint8_t i = 0; i < RR_AXES; i++) {
            record->duty[i] = device->axis[i].chain.duty;
            record->counts[i] = (RR_TRAIL_COUNTS)device->inputs.counts[i];
            record->current_ma[i] = (RR_TRAIL_CURRENT)device->inputs.current_ma[i];
            device->trail.last_counts[i] = device->inputs.counts[i];
        }
        record->supply_mv = (RR_TRAIL_SUPPLY)device->inputs.supply_mv;
        record->bits = rr_sampling_state_bits(device);
    }
    rr_sampling_tick(device);
}

void rr_device_tick(struct rr_device *device)
{
    take_requests(device);
    device->line_waits++;
    if (!device->line_ended && device->heard == RR_LINE_NONE) {
        device->line_waits = 0;
    }
    tell_garbled(device);
    read_inputs(device);
    guard(device);
    move_demands(device);
    drive(device);
    rr_device_settle(device);
    record(device);
    rr_device_settle(device);
    rr_limits_enforce(&device->limits);
    rr_kept_count(&device->tick);
}

static void load_limits(struct rr_device *device)
{
    rr_limits_defaults(&device->limits);
    for (uint8_t place = 0; place < RR_LIMITS; place++) {
        int32_t value;
        if (rr_store_read(RR_PORT(device), RR_SELF(device), (uint8_t)(1u + place), &value) &&
            rr_limits_possible(&device->limits, place, value)) { /* another build of the board may have kept what this one cannot do */
            rr_limits_set(&device->limits, place, value);
            rr_limits_enforce(&device->limits);
        }
    }
}

static uint32_t next_boot(struct rr_device *device)
{
    (void)device; /* where RR_ONLY_PORT names the port */
    int32_t boot = 0;
    (void)rr_store_read(RR_PORT(device), RR_SELF(device), RR_SLOT_BOOT, &boot);
    uint32_t next = (uint32_t)boot + 1u;
    (void)rr_store_write(RR_PORT(device), RR_SELF(device), RR_SLOT_BOOT, (int32_t)next);
    return next;
}

void rr_device_start(struct rr_device *device, const struct rr_port *port, void *self, uint8_t cause, int32_t fault)
{
    memset(device, 0, sizeof *device);
    device->tick = RR_START_TICK;
    device->late_by = -1;
#ifdef RR_ONLY_PORT
    (void)port;
    (void)self;
#else
    device->port = port;
    device->self = self;
#endif
    RR_PORT(device)->off(RR_SELF(device));
    load_limits(device);
    device->boot = next_boot(device); /* last: it may leave the store busy */
    if (fault != 0) {
        rr_finding_note(&device->last_trip, RR_TRIP_SELF_TEST, fault, 0);
    } else if (cause == RR_CAUSE_BROWNOUT || cause == RR_CAUSE_WATCHDOG) {
        rr_finding_note(&device->last_trip, RR_TRIP_RESTARTED, cause, 0);
    }
    device->latch.trip = device->last_trip.trip;
    rr_latch_off(&device->latch);
    rr_notice_push(device, RR_NOTICE_BOOT, cause, 0);
    if (device->latch.trip != RR_TRIP_NONE) {
        device->last_trip_tick = device->tick;
        rr_notice_push(device, RR_NOTICE_TRIP, (uint8_t)(device->latch.trip << 4), 0);
        rr_notice_push(device, RR_NOTICE_OFF, device->latch.state, 0);
    }
    rr_device_settle(device);
}
