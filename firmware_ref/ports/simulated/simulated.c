/* A whole board in software; see simulated.h. */
#include "simulated.h"

#include <string.h>

#define BITS_PER_BYTE 10u      /* start bit, eight data bits, stop bit */
#define BIT_TIME      1000000u /* in units of 1 us / baud */

_Static_assert(RR_AXES <= PLANT_AXES_MAX && RR_SERVOS <= PLANT_SERVOS_MAX, "the plant has room for the board's motors");

/* ---- the core's port ---- */

static int read_byte(void *self)
{
    struct simulated_wire *wire = &((struct simulated *)self)->wire;
    if (wire->received_count == 0) {
        wire->received_first = 0;
        return -1;
    }
    wire->received_count--;
    return wire->received[wire->received_first++];
}

static uint16_t room(void *self)
{
    return (uint16_t)(SIMULATED_TRANSMIT_BYTES - ((const struct simulated *)self)->wire.to_host_count);
}

static void write_bytes(void *self, const char *bytes, uint8_t length)
{
    struct simulated_wire *wire = &((struct simulated *)self)->wire;
    memcpy(wire->to_host + wire->to_host_count, bytes, length);
    wire->to_host_count = (uint16_t)(wire->to_host_count + length);
}

static bool took_break(void *self)
{
    struct simulated *s = self;
    bool broke = s->broke;
    s->broke = false;
    return broke;
}

static uint32_t overruns(void *self)
{
    return ((const struct simulated *)self)->overruns;
}

static uint32_t worst_us(void *self)
{
    (void)self;
    return 0;
}

static void inputs(void *self, struct rr_inputs *read)
{
    struct simulated *s = self;
    memset(read, 0, sizeof *read);
    for (uint8_t i = 0; i < RR_AXES; i++) {
        if ((RR_CAPS & RR_CAP_ENCODER) != 0) {
            uint8_t wired = s->plant.wired_to[i];
            read->counts[i] = (int32_t)((uint32_t)plant_read_counts(&s->plant, wired) - s->counts_zero[wired]);
        }
        if ((RR_CAPS & RR_CAP_CURRENT) != 0) {
            read->current_ma[i] = plant_read_current_ma(&s->plant, i);
        }
    }
    s->supply_mv = plant_read_supply_mv(&s->plant);
    read->supply_mv = (RR_CAPS & RR_CAP_SUPPLY) != 0 ? s->supply_mv : 0;
    read->temperature_dc = (RR_CAPS & RR_CAP_TEMPERATURE) != 0 ? plant_read_temperature_dc(&s->plant, 0) : (int16_t)0;
}

static void bridge(void *self, uint8_t axis, int16_t duty, bool brake)
{
    struct plant_axis *driven = &((struct simulated *)self)->plant.axis[axis];
    driven->duty = duty;
    driven->brake = brake;
}

static void pulse(void *self, uint8_t servo, uint32_t pulse_ns)
{
    plant_servo_set_pulse(&((struct simulated *)self)->plant.servo[servo], pulse_ns / 1000.0);
}

static void off(void *self)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        bridge(self, i, 0, false);
    }
    for (int i = 0; i < RR_SERVOS; i++) {
        pulse(self, (uint8_t)i, 0);
    }
}

static bool load(void *self, uint16_t offset, void *bytes, uint16_t length)
{
    memcpy(bytes, ((const struct simulated *)self)->store + offset, length);
    return true;
}

static bool store(void *self, uint16_t offset, const void *bytes, uint16_t length)
{
    struct simulated *s = self;
    memcpy(s->store + offset, bytes, length);
    s->stored = true;
    if (s->keep != NULL) {
        s->keep(s->keeper, offset, bytes, length);
    }
    return true;
}

/* ---- the wire ---- */

static uint64_t now(const struct simulated *s)
{
    return s->ticks * RR_TICK_US * s->wire.baud;
}

/* Hands the board what has arrived by now. */
static void arrive(struct simulated *s)
{
    struct simulated_wire *wire = &s->wire;
    uint32_t count = wire->to_board_count;
    if (count == 0) {
        return;
    }
    if (wire->baud != 0) {
        uint64_t could = (now(s) - wire->to_board_start) / (BITS_PER_BYTE * BIT_TIME);
        count = could < count ? (uint32_t)could : count;
        wire->to_board_start += (uint64_t)count * BITS_PER_BYTE * BIT_TIME;
    }
    memmove(wire->received, wire->received + wire->received_first, wire->received_count);
    wire->received_first = 0;
    uint32_t left = SIMULATED_RECEIVE_BYTES - wire->received_count;
    uint32_t fits = count < left ? count : left;
    memcpy(wire->received + wire->received_count, wire->to_board, fits);
    wire->received_count = (uint16_t)(wire->received_count + fits);
    s->overruns += count - fits;
    wire->to_board_count -= count;
    memmove(wire->to_board, wire->to_board + count, wire->to_board_count);
}

/* Puts the next line on the wire at a time; false where none is whole. */
static bool set_out(struct simulated_wire *wire, uint64_t start)
{
    if (wire->to_host_count == 0) {
        return false;
    }
    const char *end = memchr(wire->to_host, '\n', wire->to_host_count);
    if (end == NULL) {
        return false;
    }
    wire->under_way = (uint16_t)(end - wire->to_host + 1);
    wire->free_at = start + (uint64_t)wire->under_way * BITS_PER_BYTE * BIT_TIME;
    return true;
}

/* Moves the lines whose last bit has left by now to `sent`. */
static void leave(struct simulated *s)
{
    struct simulated_wire *wire = &s->wire;
    if (wire->to_host_count == 0) {
        return;
    }
    uint64_t at = now(s);
    uint64_t start = at;
    uint16_t gone = 0;
    if (wire->baud == 0) {
        gone = wire->to_host_count;
        memcpy(wire->sent, wire->to_host, gone);
        wire->sent_count = gone;
        wire->spoke = true; /* a line may be in parts here, so its kind is not looked at */
        wire->to_host_count = 0;
        return;
    }
    while ((wire->under_way != 0 || set_out(wire, start)) && wire->free_at <= at) {
        wire->spoke = wire->spoke || wire->to_host[0] != 'D';
        memcpy(wire->sent + wire->sent_count, wire->to_host, wire->under_way);
        wire->sent_count = (uint16_t)(wire->sent_count + wire->under_way);
        wire->to_host_count = (uint16_t)(wire->to_host_count - wire->under_way);
        memmove(wire->to_host, wire->to_host + wire->under_way, wire->to_host_count);
        wire->under_way = 0;
        start = wire->free_at;
    }
}

/* ---- time ---- */

static void start_board(struct simulated *s)
{
    for (uint8_t i = 0; i < RR_AXES; i++) {
        s->counts_zero[i] = (uint32_t)plant_read_counts(&s->plant, i);
    }
    s->moving = false;
    s->sag_left = 0;
    s->broke = false;
    s->overruns = 0;
    rr_device_start(&s->device, &s->port, s, s->cause, 0);
}

/* Has a motor's start pulled the board's supply down by now? */
static bool has_sagged(struct simulated *s)
{
    bool moving = false;
    for (uint8_t i = 0; i < RR_AXES; i++) {
        moving = moving || s->device.axis[i].chain.duty != 0;
    }
    if (s->sag_ticks != 0 && moving && !s->moving) {
        s->sag_left = s->sag_ticks + 1;
    }
    s->moving = moving;
    return s->sag_left != 0 && --s->sag_left == 0;
}

static void boot_tick(struct simulated *s)
{
    plant_step(&s->plant);
    s->ticks++;
    simulated_purge(s);
    if (--s->boot_left == 0) {
        start_board(s);
    }
}

/* May time go on, though what was sent is not taken? */
static bool can_wait(const struct simulated_wire *wire, bool patient)
{
    return wire->sent_count == 0 ||
           (patient && !wire->spoke && wire->sent_count <= SIMULATED_SENT_BYTES - SIMULATED_TRANSMIT_BYTES);
}

uint32_t simulated_run(struct simulated *s, uint32_t ticks, bool patient)
{
    uint32_t passed = 0;
    while (passed < ticks && can_wait(&s->wire, patient)) {
        passed++;
        if (s->boot_left != 0) {
            boot_tick(s);
            continue;
        }
        arrive(s);
        rr_device_tick(&s->device);
        plant_step(&s->plant);
        s->ticks++;
        leave(s);
        if (s->supply_mv < s->brownout_mv || has_sagged(s)) {
            simulated_reset(s, RR_CAUSE_BROWNOUT);
        }
    }
    return passed;
}

void simulated_reset(struct simulated *s, uint8_t cause)
{
    off(s);
    s->cause = cause;
    s->wire.to_host_count = 0;
    s->wire.under_way = 0;
    s->wire.received_count = 0;
    s->boot_left = s->boot_ticks;
    if (s->boot_left == 0) {
        start_board(s);
    }
}

/* ---- making, and the host's end ---- */

static void set_port(struct simulated *s)
{
    s->port = (struct rr_port){
        .read = read_byte,
        .room = room,
        .write = write_bytes,
        .took_break = took_break,
        .overruns = overruns,
        .inputs = inputs,
        .bridge = bridge,
        .pulse = pulse,
        .off = off,
        .load = load,
        .store = store,
        .worst_us = worst_us,
        .firmware = s->firmware,
        .board = s->board,
        .serial = s->serial,
    };
}

void simulated_clear(struct simulated *s)
{
    memset(s, 0, sizeof *s);
    memset(s->store, 0xFF, sizeof s->store);
    set_port(s);
    plant_parameters_vent(&s->parameters);
}

void simulated_preset(struct simulated *s, uint8_t number, uint8_t index, int32_t value)
{
    uint8_t slot = number == 0 ? RR_SLOT_BOOT : (uint8_t)(1u + rr_limits_place(number, index));
    (void)rr_store_write(&s->port, s, slot, value);
}

bool simulated_start(struct simulated *s, uint32_t baud)
{
    if (s->parameters.axes != RR_AXES || s->parameters.servos != RR_SERVOS ||
        !plant_start(&s->plant, &s->parameters, RR_TICK_US, s->seed)) {
        return false;
    }
    s->wire.baud = baud;
    s->cause = RR_CAUSE_POWER;
    start_board(s);
    return true;
}

void simulated_receive(struct simulated *s, const uint8_t *bytes, uint32_t length)
{
    struct simulated_wire *wire = &s->wire;
    if (s->deaf) {
        return;
    }
    if (wire->to_board_count == 0 && wire->to_board_start < now(s)) {
        wire->to_board_start = now(s);
    }
    uint32_t left = SIMULATED_WIRE_BYTES - wire->to_board_count;
    uint32_t fits = length < left ? length : left;
    memcpy(wire->to_board + wire->to_board_count, bytes, fits);
    wire->to_board_count += fits;
    s->overruns += length - fits;
}

void simulated_purge(struct simulated *s)
{
    s->wire.to_board_count = 0;
}

bool simulated_fault(struct simulated *s, const char *name, uint8_t axis, double amount)
{
    if (strcmp(name, "brownout_on_start") == 0) {
        s->sag_ticks = (uint32_t)(amount + 0.5);
        return true;
    }
    if (strcmp(name, "deaf") == 0) {
        s->deaf = amount > 0.0;
        return true;
    }
    return plant_set_fault(&s->plant, name, axis, amount);
}

void simulated_break(struct simulated *s)
{
    if ((RR_CAPS & RR_CAP_BREAK) != 0 && s->boot_left == 0 && !s->deaf) {
        s->broke = true;
    }
}

const char *simulated_take(struct simulated *s, uint32_t *length)
{
    *length = s->wire.sent_count;
    s->wire.sent_count = 0;
    s->wire.spoke = false;
    return s->wire.sent;
}
