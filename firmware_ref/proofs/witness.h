/* A witness of SPEC section 12 that knows the device from outside only: it reads the lines both ways, the inputs and the
 * pins, keeps its own counts, and names the clause that a tick broke. It shares no code with the core, so that a fault in
 * the core is not repeated here. For one axis and one servo. */
#ifndef RAMPRIG_PROOFS_WITNESS_H
#define RAMPRIG_PROOFS_WITNESS_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum witness_limit {
    W_LEASE_MS, W_STOP_TICKS, W_UNDER_MV, W_OVER_MV, W_SUPPLY_TICKS, W_CEILING_DUTY, W_SLEW_UP_DUTY, W_SLEW_DOWN_DUTY,
    W_DWELL_TICKS, W_STILL_COUNTS, W_STILL_TICKS, W_SENSE, W_TRIP_MA, W_TRIP_TICKS, W_OFFSET_MA, W_RATED_MA,
    W_THERMAL_S, W_STALL_DUTY, W_STALL_COUNTS, W_STALL_TICKS, W_WRONG_COUNTS, W_SPEED_COUNTS, W_PULSE_MIN_US,
    W_PULSE_MAX_US, W_PULSE_SLEW_NS, W_PULSE_HOME_US, W_LIMITS
};

#define WITNESS_LINE_MAX 200u
#define WITNESS_LONG     60000u /* counters of ticks are held here */

/* What is seen of one tick. Lines with their LF. */
struct witness_tick {
    const uint8_t *sent; /* at most one line that the host sent, or NULL */
    size_t sent_length;
    const char *told; /* all lines of the device */
    size_t told_length;
    bool broke;
    int32_t counts;
    int32_t current_ma; /* before the offset */
    int32_t supply_mv;
    int32_t duty; /* at the pins when the tick has ended */
    uint32_t pulse_ns;
};

enum witness_latch { W_FREE, W_CATEGORY_0, W_CATEGORY_1, W_CLEARED /* and not yet armed again */ };

struct witness {
    uint32_t tick; /* of the device, the coming one */
    uint32_t tick_us;
    int32_t limit[W_LIMITS];   /* in force in the coming tick */
    int32_t agreed[W_LIMITS];  /* in force from the tick after it */
    bool live;                 /* an `arm` was answered ok, and no `off` was told since */
    bool stopping;             /* a category 1 stop was told */
    enum witness_latch latch;
    bool by_current;           /* the latched trip is overcurrent */
    uint16_t stop_for;         /* ticks since the category 1 stop began */
    uint16_t silent_for;       /* ticks since the last new valid request */
    uint32_t lease_ticks;      /* of the last `arm` */
    int32_t duty;              /* of the last tick */
    int8_t last_sign;
    uint16_t zero_for;
    uint16_t still_for;
    int32_t mark;
    uint32_t pulse_ns;
    uint16_t over_for; /* ticks in a row with too much current */
    int32_t current_ma;
    char last_sent[WITNESS_LINE_MAX]; /* the last new request */
    char last_told[WITNESS_LINE_MAX]; /* and its answer */
};

/* Begins with the limits that the device has at its start. */
void witness_begin(struct witness *witness, const int32_t *limits, uint32_t tick, uint32_t tick_us, bool tripped);

/* Judges one tick: NULL, or the clause that it broke and how. */
const char *witness_judge(struct witness *witness, const struct witness_tick *seen);

/* The digest of limits (SPEC LIMIT-5). */
uint32_t witness_digest(const int32_t *limits);

/* Writes body, check and LF; returns the length. `line` has room for WITNESS_LINE_MAX bytes. */
size_t witness_seal(const char *body, char *line);

/* Is the line, with its LF, a request (SPEC LINE-2 to LINE-5, CHECK-1, BAD-5)? Then `body` is what comes before the check;
 * it has room for WITNESS_LINE_MAX bytes. */
bool witness_request(const uint8_t *line, size_t length, char *body);

/* Is the value looser than the present one (SPEC LIMIT-3)? */
bool witness_is_looser(enum witness_limit limit, int32_t present, int32_t value);

/* The number of the limit in the protocol, and its word. */
uint8_t witness_limit_number(enum witness_limit limit);
const char *witness_limit_word(enum witness_limit limit);

#endif
