/* The device: lines in, outputs and lines out, one tick at a time (SPEC RUN-1 to RUN-3).
 *
 * A port makes one `struct rr_device`, calls `rr_device_start` once with all outputs off, and then `rr_device_tick` each
 * tick; between the ticks it calls `rr_device_idle` where RR_SPREAD is 1. All from one context. Nothing here blocks, waits
 * or allocates. */
#ifndef RAMPRIG_DEVICE_H
#define RAMPRIG_DEVICE_H

#include "block.h"
#include "fields.h"
#include "latch.h"
#include "limits.h"
#include "line.h"
#include "orders.h"
#include "port.h"
#include "trail.h"
#include "voice.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_axis {
    struct rr_chain chain;
    struct rr_guard guard;
    struct rr_glide demand;
    bool brake;
};

struct rr_servo {
    struct rr_glide swing; /* in ns */
    rr_ns pulse_ns;        /* 0 = none */
};

/* What every answer begins with. */
struct rr_verdict {
    uint32_t tick;
    uint8_t tag;
    uint8_t reason; /* RR_REASON_COUNT = ok */
};

/* The most numbers of an answer: `state`, or `counters` with nine. */
#define RR_STATE_VALUES (5 + 3 * RR_AXES + RR_SERVOS)
#define RR_REPLY_VALUES (RR_STATE_VALUES > 9 ? RR_STATE_VALUES : 9)

/* An answer as numbers, from which it is said, and said again letter for letter (SPEC TAG-3). */
struct rr_reply {
    struct rr_verdict verdict;
    uint8_t word;
    uint8_t count; /* of values */
    bool waiting;  /* to be said */
    uint32_t value[RR_REPLY_VALUES];
};

/* An answer outside the exactly-once memory: to `stop` under tag ff, or a refusal with reason `tag`. */
struct rr_aside {
    struct rr_verdict verdict;
    uint8_t state;
    bool waiting;
};

/* One request's exactly-once memory (SPEC TAG-3). */
struct rr_memory {
    struct rr_reply reply;
    struct rr_body body; /* what follows the tag */
    bool full;
};

/* A data line from its first sample until it has been said; later what `again` sends. */
struct rr_parcel {
    union {
        uint8_t bytes[RR_BLOCK_BYTES(RR_PAYLOAD)]; /* packed */
        struct {
            uint32_t tick;
            uint32_t mask;
            uint16_t period;
            int32_t value[RR_CHANNELS];
        } plain;
    } u;
    uint8_t length; /* characters of a packed payload, 0 = plain */
    uint8_t number;
};

/* One is being filled, one said, and the last RR_KEEP are kept. */
#define RR_PARCELS (2 + RR_KEEP)

struct rr_logging {
    struct rr_block block;
    uint8_t filling; /* which parcel */
    uint8_t saying;
    bool waiting;    /* `saying` is to be said, or being said */
    bool goes_first; /* it belongs to the logging before: ahead of the answer to `log` (LOG-4) */
    bool again_waiting;
    uint8_t again; /* which parcel to say again */
    uint8_t kept_count;
    uint8_t number; /* of the next data line */
    uint8_t form;
    bool taken;     /* `sample` waits to be put into its line */
    bool flush_due; /* the packed line is to be closed after it */
    uint32_t next_tick; /* of the next sample; the one taken was a period before */
    uint32_t made;      /* by this logging */
    uint32_t made_ever;
    uint32_t dropped_ever;
    struct rr_channel channel[RR_CHANNELS];
    int32_t sample[RR_CHANNELS];
    struct rr_parcel parcel[RR_PARCELS];
};

/* A trail answer in the making. */
#define RR_TRAIL_CHANNELS 5
struct rr_packing {
    struct rr_block block;
    uint16_t next;  /* record */
    uint8_t axis;
    uint8_t length; /* characters, once it is whole */
    struct rr_channel channel[RR_TRAIL_CHANNELS];
    uint8_t bytes[RR_BLOCK_BYTES(RR_TRAIL_PAYLOAD)];
};

/* What happened, told in order (SPEC NOTE-1). */
struct rr_happened {
    uint16_t value;    /* category, ticks; a trip's numbers are with the trip */
    uint16_t tick_low; /* the tick's low half: it is told long before it could be mistaken */
    uint8_t kind;      /* enum rr_notice */
    uint8_t index;     /* axis, servo, tag, state, cause or source; of a trip its number too, in the upper four bits */
    uint8_t number;
};

struct rr_notices {
    uint8_t first;
    uint8_t count;
    uint8_t number; /* of the next notice */
    struct rr_happened happened[RR_NOTICES];
};

/* Which line is being said. */
enum rr_saying { RR_SAYING_NOTHING, RR_SAYING_REPLY, RR_SAYING_ASIDE, RR_SAYING_NOTICE, RR_SAYING_DATA, RR_SAYING_AGAIN };

/* What is used most comes first, and in each part its arrays last: a small controller reaches some 60 bytes from a pointer
 * with instructions of half the length. */
struct rr_device {
#ifndef RR_ONLY_PORT
    const struct rr_port *port;
    void *self;
#endif
    uint32_t tick;
    struct rr_latch latch;
    uint8_t saying;     /* enum rr_saying */
    uint8_t heard;      /* enum rr_line_kind: a line that waits to be carried out */
    bool line_ended;    /* an LF has been heard, and its line is not judged yet */
    bool read;          /* the line heard has been read: it holds its request in place of its text */
    uint8_t line_waits; /* ticks that a line has waited to be judged, read or answered */
    bool taking;        /* requests are being carried out: notices wait for (f) of the tick */
    bool packing_busy;  /* a trail answer is in the making */
    bool at_ceiling;
    bool at_slew;
    bool locked;
    uint8_t garbled_rest; /* ticks until the next notice may be sent */
    int32_t late_by;      /* an order of this tick came so many ticks late; negative = none did */
    uint16_t renewed_low; /* low half of the tick of the last lease renewal */
    uint16_t lease_ms;
    uint16_t lease_ticks;
    uint16_t over_for; /* ticks in a row beyond the supply's limits */
    uint16_t under_for;
    struct rr_inputs inputs; /* of this tick, offsets taken off */
    struct rr_finding last_trip;
    struct rr_finding trip_before; /* the last that had another number, until it has been told */
    uint32_t last_trip_tick;
    uint32_t boot;
    uint32_t lines;
    uint32_t repeats;
    uint32_t garbled_told;
    struct rr_voice voice;
    struct rr_limits limits;
    struct rr_axis axis[RR_AXES];
#if RR_SERVOS > 0
    struct rr_servo servo[RR_SERVOS];
#endif
    struct rr_line line;
    struct rr_memory memory;
    struct rr_aside aside;
    struct rr_notices notices;
    struct rr_logging logging;
    /* Orders wait in state `armed` only, and a trail is read after a trip only, until the next `arm`: one memory. */
    union {
        struct rr_orders orders;
        struct rr_packing packing;
    } u;
    struct rr_trail trail;
    /* Bit by place: a limit's value is not in the store yet. In few bytes, since they are looked through in every idle time:
     * longer, and bytes at 500 kbaud would be lost. */
    uint8_t unsaved[(RR_LIMITS + 7) / 8];
};

/* Takes over after a start: outputs off, limits from the store, notice `boot`. `cause` is the reset's (enum rr_cause),
 * `fault` the number of a failed self-test or 0. */
void rr_device_start(struct rr_device *device, const struct rr_port *port, void *self, uint8_t cause, int32_t fault);

/* Carries out one tick. */
void rr_device_tick(struct rr_device *device);

/* Does a piece of what can wait: hearing, saying, and where `long_ones` reading a request, coding a sample, and keeping,
 * which take a small controller up to a third of a ms. False where there is nothing to do now. */
bool rr_device_idle(struct rr_device *device, bool long_ones);

/* ---- between the files of the device, not for ports ---- */

/* device.c: orders in the queue. */
uint8_t rr_device_queued(const struct rr_device *device);
/* idle.c: says a piece of a line; false where there is nothing to say, or no room. All idle work, where it is not spread. */
bool rr_device_say(struct rr_device *device);
void rr_device_settle(struct rr_device *device);
/* answer.c: reads the request of a line; may it be answered yet; carries it out. */
void rr_answer_read(struct rr_device *device);
bool rr_answer_may(const struct rr_device *device);
void rr_answer_request(struct rr_device *device);
/* reply.c: answers as numbers, and the fields they are said in. Each `..._field` gives the voice its next field, and
 * returns false where there is none. */
void rr_reply_note(struct rr_device *device, uint8_t word, uint32_t told);
bool rr_reply_field(struct rr_device *device, uint8_t field);
bool rr_reply_aside_field(struct rr_device *device, uint8_t field);
/* stop.c: stops, trips, and what follows from them. */
void rr_stop_begin(struct rr_device *device, uint8_t category, uint8_t source);
void rr_stop_off(struct rr_device *device);
void rr_stop_trip(struct rr_device *device, const struct rr_finding *finding);
/* notice.c: notices. */
void rr_notice_push(struct rr_device *device, uint8_t kind, uint8_t index, uint16_t value);
bool rr_notice_field(struct rr_device *device, uint8_t field);
bool rr_notice_identity_field(struct rr_device *device, uint8_t field);
void rr_notice_say_state(struct rr_voice *voice, uint8_t state);
void rr_notice_say_trip(struct rr_voice *voice, uint8_t trip);
/* sampling.c: log, again, trail. */
int32_t rr_sampling_channel(const struct rr_device *device, uint8_t bit); /* a channel's value at this tick */
uint16_t rr_sampling_state_bits(const struct rr_device *device);
bool rr_sampling_mask_fits(uint32_t mask);
uint32_t rr_sampling_change(struct rr_device *device, uint16_t period, uint32_t mask, uint8_t form);
void rr_sampling_tick(struct rr_device *device);
bool rr_sampling_step(struct rr_device *device); /* puts a taken sample into its line; false where there is none */
bool rr_sampling_again(struct rr_device *device, uint8_t number);
bool rr_sampling_field(struct rr_device *device, const struct rr_parcel *parcel, uint8_t field);
/* packing.c: the payload of a `trail` answer, a record at a time. */
bool rr_packing_begin(struct rr_device *device, uint8_t axis, uint32_t first);
void rr_packing_step(struct rr_device *device);

#endif
