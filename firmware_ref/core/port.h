/* How hardware enters the core: one const struct of functions, filled in by a port.
 *
 * The core calls every function from `rr_device_start`, `rr_device_tick` and `rr_device_idle` only, never from an interrupt, and never one
 * from inside another. A port may fill its receive ring, count edges and keep PWM running in interrupts; what it shares
 * with them it must guard itself. */
#ifndef RAMPRIG_PORT_H
#define RAMPRIG_PORT_H

#include "config.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* What the guard judges and the log shows: one reading of all inputs at a tick. */
struct rr_inputs {
    int32_t counts[RR_AXES];     /* quadrature counts x4 since start, wrapping */
    RR_CURRENT current_ma[RR_AXES]; /* motor current, signed as the bridge sees it, before the offset */
    RR_SUPPLY supply_mv;           /* 0 where not measured */
    int16_t temperature_dc;      /* 0 where not measured */
    uint32_t illegal_edges;      /* encoder transitions that skipped a state, since start */
};

struct rr_port {
    /* The next received byte, or -1. */
    int (*read)(void *self);
    /* Free bytes of the transmit queue. */
    uint16_t (*room)(void *self);
    /* Queues bytes to send; never more than `room` said. */
    void (*write)(void *self, const char *bytes, uint8_t length);
    /* True once after a BREAK on the receive line. */
    bool (*took_break)(void *self);
    /* Bytes lost by the receiver since start. */
    uint32_t (*overruns)(void *self);
    void (*inputs)(void *self, struct rr_inputs *inputs);
    /* Sets a bridge: duty in 1/10000 by sign and magnitude; at 0 it brakes or coasts. */
    void (*bridge)(void *self, uint8_t axis, int16_t duty, bool brake);
    /* Sets a servo's pulse in ns, 0 = none; called when it changes. */
    void (*pulse)(void *self, uint8_t servo, uint32_t pulse_ns);
    /* All outputs off, by the shortest way there is. */
    void (*off)(void *self);
    /* Reads or writes the store that survives power-off: `length` bytes at `offset`. Returns false, nothing done, where there is none or it is busy.
     * A write may take the bytes in any order, but must be done with all of them before the next write begins; a store that
     * writes on after the return must take a second write that goes on where the first ends. */
    bool (*load)(void *self, uint16_t offset, void *bytes, uint16_t length);
    bool (*store)(void *self, uint16_t offset, const void *bytes, uint16_t length);
    /* The worst time of a tick so far in us, 0 where not measured. */
    uint32_t (*worst_us)(void *self);
    /* Identity: three tokens (SPEC WHO-1). */
    const RR_FLASH char *firmware;
    const RR_FLASH char *board;
    const RR_FLASH char *serial;
};

/* The port of a device. A board that has one device may name its port when the core is compiled, and the calls go straight
 * to its functions; `self` is then NULL. */
#ifdef RR_ONLY_PORT
extern const struct rr_port RR_ONLY_PORT;
#define RR_THE_PORT(port) (&RR_ONLY_PORT)
#define RR_PORT(device) (&RR_ONLY_PORT)
#define RR_SELF(device) NULL
#else
#define RR_THE_PORT(port) (port)
#define RR_PORT(device) ((device)->port)
#define RR_SELF(device) ((device)->self)
#endif

#endif
