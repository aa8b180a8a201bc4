/* The device: lines in, outputs and lines out, one tick at a time (SPEC RUN-1 to RUN-3).
 *
 * A port makes one `struct rr_device`, calls `rr_device_start` once with all outputs off, and then `rr_device_tick` each
 * tick from one context. Nothing here blocks, waits or allocates. */
#ifndef RAMPRIG_DEVICE_H
#define RAMPRIG_DEVICE_H

#include "block.h"
#include "fields.h"
#include "latch.h"
#include "limits.h"
#include "line.h"
#include "orders.h"
#include "out.h"
#include "port.h"
#include "trail.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_axis {
    struct rr_chain chain;
    struct rr_guard guard;
    struct rr_glide demand;
    struct rr_chain_limits chain_limits;
    struct rr_guard_limits guard_limits;
    bool brake;
};

struct rr_servo {
    struct rr_glide swing; /* in ns */
    struct rr_servo_limits limits;
    int32_t pulse_ns; /* 0 = none */
};

/* One request's exactly-once memory (SPEC TAG-3). */
struct rr_memory {
    char answer[RR_DEVICE_LINE_MAX];
    char body[RR_HOST_LINE_MAX];
    uint8_t answer_length; /* 0 = nothing kept */
    uint8_t tag;
};

struct rr_logging {
    struct rr_block block;
    char payload[RR_PAYLOAD_MAX];
    uint32_t mask;
    uint32_t next_tick;
    uint32_t made; /* by this logging */
    uint16_t period;
    uint8_t form;
    uint8_t number; /* of the next data line */
    uint32_t made_ever;
    uint32_t dropped_ever;
#if RR_KEEP > 0
    char kept[RR_KEEP][RR_DEVICE_LINE_MAX];
    uint8_t kept_length[RR_KEEP];
    uint8_t kept_count;
#endif
};

/* What happened in this tick, told at its end in (f) (SPEC RUN-2, NOTE-1). */
struct rr_happened {
    int32_t value;
    int32_t bound;
    uint8_t kind; /* enum rr_notice */
    uint8_t index;
};

struct rr_notices {
    struct rr_happened happened[RR_NOTICES];
    uint8_t count;
    uint8_t number; /* of the next notice */
};

struct rr_device {
    const struct rr_port *port;
    void *self;
    uint32_t tick;
    uint32_t boot;
    struct rr_latch latch;
    struct rr_finding found;
    struct rr_finding late; /* an order of this tick came late */
    struct rr_finding last_trip;
    uint32_t last_trip_tick;
    uint32_t renewed; /* tick of the last lease renewal */
    uint32_t lease_ms;
    uint32_t lease_ticks;
    uint16_t over_for; /* ticks in a row beyond the supply's limits */
    uint16_t under_for;
    struct rr_board_limits board_limits;
    bool limits_changed; /* in this tick: in force from the next */
    bool at_ceiling;
    bool at_slew;
    bool locked;
    struct rr_inputs inputs; /* of this tick, offsets taken off */
    struct rr_limits limits;
    struct rr_axis axis[RR_AXES];
#if RR_SERVOS > 0
    struct rr_servo servo[RR_SERVOS];
#endif
    struct rr_orders orders;
    struct rr_line line;
    struct rr_memory memory;
    struct rr_logging logging;
    struct rr_trail trail;
    struct rr_notices notices;
    uint32_t lines;
    uint32_t repeats;
    uint32_t garbled_told;
    uint32_t garbled_at;
    bool garbled_ever;
};

/* Takes over after a start: outputs off, limits from the store, notice `boot`. `cause` is the reset's (enum rr_cause),
 * `fault` the number of a failed self-test or 0. */
void rr_device_start(struct rr_device *device, const struct rr_port *port, void *self, uint8_t cause, int32_t fault);

/* Carries out one tick. */
void rr_device_tick(struct rr_device *device);

/* ---- between the files of the device, not for ports ---- */

/* answer.c: carries out a request or a bare line. */
void rr_answer_request(struct rr_device *device);
/* stop.c: stops, trips, and what follows from them. */
void rr_stop_begin(struct rr_device *device, uint8_t category, uint8_t source);
void rr_stop_off(struct rr_device *device);
void rr_stop_trip(struct rr_device *device, const struct rr_finding *finding);
/* notice.c: notices. */
void rr_notice_push(struct rr_device *device, uint8_t kind, uint8_t index, int32_t value, int32_t bound);
void rr_notice_send(struct rr_device *device);
void rr_notice_identity(const struct rr_device *device, struct rr_out *out);
const char *rr_state_word(uint8_t state);
const char *rr_trip_word(uint8_t trip);
/* sampling.c: log, again, trail. */
uint16_t rr_sampling_state_bits(const struct rr_device *device);
bool rr_sampling_mask_fits(uint32_t mask);
uint32_t rr_sampling_change(struct rr_device *device, uint16_t period, uint32_t mask, uint8_t form);
void rr_sampling_tick(struct rr_device *device);
bool rr_sampling_again(const struct rr_device *device, uint8_t number);
void rr_sampling_send_again(struct rr_device *device, uint8_t number);
uint8_t rr_sampling_trail(struct rr_device *device, uint8_t axis, uint32_t first, char *payload);

#endif
