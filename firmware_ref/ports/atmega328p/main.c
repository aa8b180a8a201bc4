/* The reference firmware on a 16 MHz ATmega328P: the core's port, and the loop that gives it its ticks. */
#include "analog.h"
#include "board.h"
#include "boot.h"
#include "bridge.h"
#include "encoder.h"
#include "keeping.h"
#include "pulses.h"
#include "serial.h"
#include "tick.h"

#include "../../core/device.h"

#include <avr/interrupt.h>
#include <avr/wdt.h>

_Static_assert(F_CPU == 16000000ul, "the timers' divisors are for 16 MHz");

/* Longer than the slowest start, far shorter than a lease. */
#define WATCHDOG WDTO_60MS

/* A board with a temperature sensor has its reading here, in 1/10 degC. */
#ifndef TEMPERATURE_DC
#define TEMPERATURE_DC 0
#endif

static struct rr_device device;
static int32_t counts;

static int read_byte(void *self)
{
    (void)self;
    return serial_read();
}

static uint16_t room(void *self)
{
    (void)self;
    return serial_room();
}

static void write_bytes(void *self, const char *bytes, uint8_t length)
{
    (void)self;
    for (uint8_t i = 0; i < length; i++) {
        serial_write((uint8_t)bytes[i]);
    }
}

static bool took_break(void *self)
{
    (void)self;
    return serial_took_break();
}

static uint32_t overruns(void *self)
{
    (void)self;
    return serial_overruns();
}

static void inputs(void *self, struct rr_inputs *read)
{
    (void)self;
    counts += encoder_moved();
    read->counts[0] = counts;
    read->current_ma[0] = analog_current_ma();
    read->supply_mv = analog_supply_mv();
    read->temperature_dc = TEMPERATURE_DC;
    read->illegal_edges = encoder_illegal();
}

static void bridge(void *self, uint8_t axis, int16_t duty, bool brake)
{
    (void)self;
    (void)axis;
    bridge_drive(duty, brake);
}

static void pulse(void *self, uint8_t servo, uint32_t pulse_ns)
{
    (void)self;
    pulses_set(servo, pulse_ns);
}

static void off(void *self)
{
    (void)self;
    bridge_off();
    pulses_off();
}

static bool load(void *self, uint16_t offset, void *bytes, uint16_t length)
{
    (void)self;
    return keeping_load(offset, bytes, (uint8_t)length);
}

static bool store(void *self, uint16_t offset, const void *bytes, uint16_t length)
{
    (void)self;
    return keeping_store(offset, bytes, (uint8_t)length);
}

static uint32_t worst_us(void *self)
{
    (void)self;
    return tick_worst_us();
}

static const RR_FLASH char firmware_name[] = FIRMWARE_NAME;
static const RR_FLASH char board_name[] = BOARD_NAME;
static const RR_FLASH char serial_name[] = SERIAL;
_Static_assert(sizeof serial_name > 1 && sizeof serial_name <= RR_TOKEN_MAX + 1, "SERIAL is a token (SPEC FIELD-4)");

const struct rr_port board_port = {
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
    .firmware = firmware_name,
    .board = board_name,
    .serial = serial_name,
};

int main(void)
{
    uint8_t fault = boot_fault(); /* boot.c has switched the outputs off */
    wdt_enable(WATCHDOG);
    bridge_begin();
    pulses_begin();
    encoder_begin();
    serial_begin();
    keeping_begin();
    analog_begin();
    sei();
    rr_device_start(&device, &board_port, NULL, boot_cause(), fault);
    while (!analog_is_ready()) { /* half a millisecond, or the watchdog */
    }
    tick_begin();
    for (;;) {
        if (tick_take()) {
            rr_device_tick(&device);
            tick_end();
            analog_start();
            wdt_reset();
        } else if (tick_is_near() || !rr_device_idle(&device, tick_is_early())) {
            cli(); /* so that nothing can come between looking and sleeping */
            if (serial_is_quiet()) {
                tick_sleep();
            }
            sei();
        }
    }
}
