/* A whole board in software: the core, the plant at its pins, and the wire to its host, one tick at a time.
 *
 * It has no clock and does no I/O: the `posix` port drives it as a program, the `library` port inside another one. Bytes
 * from the host take their time on the wire; what the board sends is handed over in whole lines, in the tick in which the
 * last bit has left. One thread at a time. The caller owns the memory, and must not move it after `simulated_start`. */
#ifndef RAMPRIG_SIMULATED_H
#define RAMPRIG_SIMULATED_H

#include "../../core/device.h"
#include "../../core/store.h"
#include "../../plant/plant.h"

#define SIMULATED_WIRE_BYTES     65536u /* most bytes on their way from the host; what is beyond counts as overrun */
#define SIMULATED_RECEIVE_BYTES  1024u  /* the board's receive ring; what does not fit counts as overrun */
#define SIMULATED_TRANSMIT_BYTES 2048u  /* the board's transmit ring */
#define SIMULATED_SENT_BYTES     8192u  /* most that waits for the host to take it */

struct simulated_wire {
    uint32_t baud; /* 0 = takes no time */
    uint8_t to_board[SIMULATED_WIRE_BYTES];
    uint32_t to_board_count;
    uint64_t to_board_start; /* when the first of them set out; times are in 1 us / baud, ticks and bits both whole */
    uint8_t received[SIMULATED_RECEIVE_BYTES];
    uint16_t received_first;
    uint16_t received_count;
    char to_host[SIMULATED_TRANSMIT_BYTES];
    uint16_t to_host_count;
    uint16_t under_way;  /* length of the line whose bits are leaving, 0 = none */
    uint64_t free_at;    /* when its last bit has left */
    char sent[SIMULATED_SENT_BYTES]; /* whole lines that have left, for the host to take */
    uint16_t sent_count;
    bool spoke; /* not all of them are data lines */
};

struct simulated {
    /* To be set before `simulated_start`. */
    struct plant_parameters parameters;
    uint64_t seed;
    uint32_t boot_ticks;  /* how long the board hears nothing after a reset */
    int32_t brownout_mv;  /* below this on the supply it resets; 0 = never */
    char firmware[RR_TOKEN_MAX + 1];
    char board[RR_TOKEN_MAX + 1];
    char serial[RR_TOKEN_MAX + 1];
    uint8_t store[RR_STORE_BYTES]; /* 0xFF where never written */
    /* Called after each write to the store, where set. */
    void (*keep)(void *keeper, uint16_t offset, const void *bytes, uint16_t length);
    void *keeper;
    /* May be changed while running. */
    uint32_t sag_ticks; /* this long after a motor's start the board browns out; 0 = off */
    bool deaf;          /* the board hears nothing */
    /* To be read. */
    uint64_t ticks; /* passed since `simulated_start` */
    struct plant plant;
    struct rr_device device;
    bool stored; /* set with each write to the store; the caller clears it */
    /* The board's own. */
    struct simulated_wire wire;
    struct rr_port port;
    uint32_t boot_left; /* ticks until the board starts, 0 = it runs */
    uint8_t cause;
    uint32_t counts_zero[RR_AXES];
    uint32_t overruns;
    int32_t supply_mv;
    bool broke;
    bool moving;
    uint32_t sag_left; /* ticks until the supply has sagged, plus one; 0 = not sagging */
};

/* Clears everything; then set the parameters and start. */
void simulated_clear(struct simulated *s);

/* Puts a value into the store as if it had been set before this start: a limit by number and index, or with number 0 the
 * boot number. */
void simulated_preset(struct simulated *s, uint8_t number, uint8_t index, int32_t value);

/* Makes the plant and starts the board. False where the plant does not fit the board or is beyond simulation. */
bool simulated_start(struct simulated *s, uint32_t baud);

/* Lets up to `ticks` ticks pass, fewer where something sent has not been taken; returns how many have passed. With `patient`
 * data lines alone do not end it: they wait for the next other line, while there is room. */
uint32_t simulated_run(struct simulated *s, uint32_t ticks, bool patient);

/* Resets the board: outputs off at once, what it was sending is lost, and after `boot_ticks` it starts anew. */
void simulated_reset(struct simulated *s, uint8_t cause);

/* Puts bytes from the host on the wire; takes back what of them has not arrived. */
void simulated_receive(struct simulated *s, const uint8_t *bytes, uint32_t length);
void simulated_purge(struct simulated *s);

/* Switches a fault of the board or plant, by the mock's name for it; 0 is off. False for a name that is neither's. */
bool simulated_fault(struct simulated *s, const char *name, uint8_t axis, double amount);

/* Holds the receive line in the BREAK condition. */
void simulated_break(struct simulated *s);

/* Takes over what the board has sent; valid until the next call that lets time pass. */
const char *simulated_take(struct simulated *s, uint32_t *length);

#endif
