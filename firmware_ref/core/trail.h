/* The fast record from around the last trip: a ring of one record a tick (SPEC TRAIL-1, TRAIL-2). */
#ifndef RAMPRIG_TRAIL_H
#define RAMPRIG_TRAIL_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

struct rr_record {
    RR_TRAIL_COUNTS counts[RR_AXES]; /* the low bits: see `rr_trail_counts` */
    RR_TRAIL_CURRENT current_ma[RR_AXES];
    RR_TRAIL_SUPPLY supply_mv;
    int16_t duty[RR_AXES];
    uint16_t bits; /* state bits */
};

#if RR_TRAIL < 256
typedef uint8_t rr_trail_index;
#else
typedef uint16_t rr_trail_index;
#endif

enum rr_trail_phase { RR_TRAIL_RUNNING, RR_TRAIL_ENDING, RR_TRAIL_FROZEN };

struct rr_trail {
    rr_trail_index next;          /* where the next record goes */
    rr_trail_index held;          /* records in the ring */
    rr_trail_index to_go;         /* records still to take before it freezes */
    uint32_t last_tick;           /* of the newest record */
    int32_t last_counts[RR_AXES]; /* of the newest record, whole */
    uint8_t phase;
    struct rr_record record[RR_TRAIL];
};

/* Forgets all and runs: at `arm`. */
void rr_trail_begin(struct rr_trail *trail);

/* A trip has latched: a quarter of the ring more, then it freezes. */
void rr_trail_trip(struct rr_trail *trail);

/* True where a record of this tick is wanted. */
bool rr_trail_wants(const struct rr_trail *trail, bool live);

/* The place for this tick's record, to be filled in by the caller, `last_counts` too. */
struct rr_record *rr_trail_add(struct rr_trail *trail, uint32_t tick);

/* Record `index` of a frozen trail, 0 = oldest; its tick by `tick`. */
const struct rr_record *rr_trail_get(const struct rr_trail *trail, uint16_t index, uint32_t *tick);

/* A record's whole counts, from its low bits and the newest record's counts. */
int32_t rr_trail_counts(const struct rr_trail *trail, const struct rr_record *record, uint8_t axis);

#endif
