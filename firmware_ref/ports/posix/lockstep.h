/* The device's end of the lockstep frames (`ramprig.port.lockstep`): the host grants time, the board uses it up or stops
 * early when it has something to say. No I/O in it. */
#ifndef RAMPRIG_POSIX_LOCKSTEP_H
#define RAMPRIG_POSIX_LOCKSTEP_H

#include "../simulated/simulated.h"

#define LOCKSTEP_GRANT  7u /* "A", advance_us u32, n u16, then n bytes; numbers little-endian */
#define LOCKSTEP_REPLY  11u /* "B", now_us u64, n u16, then n bytes */
#define LOCKSTEP_FRAME (LOCKSTEP_GRANT + 65535u)

struct lockstep {
    uint64_t now_us;
    uint8_t frame[LOCKSTEP_FRAME];
    uint32_t length; /* of the grant so far */
};

/* Begins anew, at the board's own time: at the start, and when another host has come. */
void lockstep_begin(struct lockstep *lockstep, const struct simulated *s);

/* Takes one byte. With the last one of a grant: carries it out and returns the length of the reply made in `reply`, which
 * has room for LOCKSTEP_REPLY + SIMULATED_TRANSMIT_BYTES; else 0. False in `right` where no grant can begin with it. */
uint32_t lockstep_take(struct lockstep *lockstep, struct simulated *s, uint8_t byte, uint8_t *reply, bool *right);

#endif
