/* The core behind a port of plain memory, for the explorer and the fuzzers: one board with one axis and one servo. */
#ifndef RAMPRIG_PROOFS_RIG_H
#define RAMPRIG_PROOFS_RIG_H

#include "../core/device.h"
#include "../core/store.h"

#define RIG_OUT_MAX 4096u /* bytes the device may send in one tick; the core is told so by `room` */

struct rig {
    struct rr_device device;
    struct rr_inputs inputs;        /* to be read in the next tick */
    int16_t duty;                   /* at the bridge */
    uint32_t pulse_ns;              /* at the servo's pin */
    bool broke;                     /* a BREAK has come */
    uint8_t in[RR_HOST_LINE_MAX * 2]; /* to be received in the next tick */
    uint16_t in_count;
    uint16_t out_count;
    uint8_t store[RR_STORE_BYTES];
    char out[RIG_OUT_MAX]; /* sent since the tick began; last, so that a copy may leave it out */
};

/* An empty store, inputs at rest with a supply of 12 V. */
void rig_clear(struct rig *rig);

/* Puts a limit's value into the store, as if it had been set before the start. */
void rig_preset(struct rig *rig, uint8_t number, int32_t value);

void rig_start(struct rig *rig, uint8_t cause, int32_t fault);

/* Carries out one tick: `in` is received, `out` holds what was sent. */
void rig_tick(struct rig *rig);

#endif
