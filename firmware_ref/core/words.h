/* The words, numbers, reasons, channels, limits and trips of the ramprig line protocol.
 *
 * Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
 *
 * Each RR_..._LIST(X) is a table: define X to take a row's columns, expand the list where the table is wanted (an array
 * in flash, a switch), and undefine X. Nothing in this header takes memory by itself.
 *
 * Kinds of arguments, one letter each in a word's row, in order on the wire:
 *   u  unsigned 32 bits      i  signed 32 bits      h  eight hex digits
 *   a  axis number           s  servo number        n  duration in ticks     t  tick
 *   R  word of rests         F  word of forms       L  word of limits        ?  the kind before it may be absent
 */
#ifndef RAMPRIG_WORDS_H
#define RAMPRIG_WORDS_H

#define RR_VERSION              1             /* version of the protocol */
#define RR_HOST_LINE_MAX        80            /* bytes: longest line from host to device, LF included */
#define RR_DEVICE_LINE_MAX      200           /* bytes: longest line from device to host, LF included */
#define RR_TAG_URGENT           255           /* tag: the tag kept for `stop`, outside the exactly-once memory */
#define RR_ANSWER_TICKS         20            /* ticks: a device begins its answer within this time of the request's LF */
#define RR_GARBLED_REST_TICKS   100           /* ticks: least time between two `garbled` notices */
#define RR_HORIZON_TICKS        1073741824UL  /* ticks: an order may start or last at most this long */
#define RR_AXES_MAX             4             /* axes: most motor axes a device may have */
#define RR_SERVOS_MAX           4             /* servos: most servos a device may have */
#define RR_QUEUE_MIN            8             /* orders: least depth of the order queue */
#define RR_DUTY_FULL            10000         /* 1/10000: duty at full scale */
#define RR_BLOCK_SAMPLES_MAX    255           /* samples: most samples in one packed block */
#define RR_FLUSH_TICKS          100           /* ticks: a packed data line is sent at the latest this long after its first sample */
#define RR_PAYLOAD_MAX          190           /* characters: longest packed payload of a data line */
#define RR_TRAIL_PAYLOAD_MAX    160           /* characters: longest packed payload of a `trail` answer */
#define RR_TRAIL_MIN            32            /* records: least length of the trail */
#define RR_RICE_QUOTIENT_MAX    16            /* bits: a quotient this long or longer is replaced by the escape */
#define RR_RICE_RESET           32            /* values: the running mean is halved after this many values */
#define RR_RICE_SUM_CAP         65535UL       /* 1: a value counts at most this much in the running mean */
#define RR_RICE_K_MAX           15            /* bits: largest Rice parameter */
#define RR_RICE_K_START         2             /* bits: Rice parameter at the start of a logging */
#define RR_THERMAL_TICKS        64            /* ticks: step of the thermal model */
#define RR_SPEED_TICKS          32            /* ticks: window of the overspeed trip */
#define RR_TOKEN_MAX            24            /* characters: longest token (a name or an identity) */

enum rr_state {
    RR_STATE_OFF      = 0,  /* outputs off, nothing latched */
    RR_STATE_ARMED    = 1,  /* orders are carried out under the lease */
    RR_STATE_STOPPING = 2,  /* a category 1 stop is running */
    RR_STATE_TRIPPED  = 3   /* outputs off, a trip is latched */
};

/* X(NAME, "word", number) */
#define RR_STATE_LIST(X) \
    X(OFF,      "off",      0) \
    X(ARMED,    "armed",    1) \
    X(STOPPING, "stopping", 2) \
    X(TRIPPED,  "tripped",  3)

enum rr_source {
    RR_SOURCE_HOST   = 0,  /* a checked `stop` */
    RR_SOURCE_BARE   = 1,  /* a bare `stop` */
    RR_SOURCE_TRIP   = 2,  /* a trip of category 1 */
    RR_SOURCE_DISARM = 3   /* a `disarm` */
};

/* X(NAME, "word", number) */
#define RR_SOURCE_LIST(X) \
    X(HOST,   "host",   0) \
    X(BARE,   "bare",   1) \
    X(TRIP,   "trip",   2) \
    X(DISARM, "disarm", 3)

enum rr_cause {
    RR_CAUSE_POWER    = 0,  /* power on */
    RR_CAUSE_EXTERNAL = 1,  /* reset pin or DTR */
    RR_CAUSE_BROWNOUT = 2,  /* supply of the board too low */
    RR_CAUSE_WATCHDOG = 3,  /* the firmware hung */
    RR_CAUSE_SOFTWARE = 4   /* the firmware restarted itself */
};

/* X(NAME, "word", number) */
#define RR_CAUSE_LIST(X) \
    X(POWER,    "power",    0) \
    X(EXTERNAL, "external", 1) \
    X(BROWNOUT, "brownout", 2) \
    X(WATCHDOG, "watchdog", 3) \
    X(SOFTWARE, "software", 4)

enum rr_rest {
    RR_REST_COAST = 0,  /* both bridge legs off */
    RR_REST_BRAKE = 1   /* motor shorted by the bridge */
};

/* X(NAME, "word", number) */
#define RR_REST_LIST(X) \
    X(COAST, "coast", 0) \
    X(BRAKE, "brake", 1)

enum rr_form {
    RR_FORM_PACKED = 0,  /* packed blocks */
    RR_FORM_PLAIN  = 1   /* one decimal line a sample */
};

/* X(NAME, "word", number) */
#define RR_FORM_LIST(X) \
    X(PACKED, "packed", 0) \
    X(PLAIN,  "plain",  1)

enum rr_trip {
    RR_TRIP_NONE         = 0,  /* no trip */
    RR_TRIP_SELF_TEST    = 1,  /* the board found itself faulty */
    RR_TRIP_RESTARTED    = 2,  /* the board restarted by brown-out or watchdog */
    RR_TRIP_LINE_BREAK   = 3,  /* a BREAK came on the receive line */
    RR_TRIP_OVERCURRENT  = 4,  /* more than trip_ma for trip_ticks ticks in a row */
    RR_TRIP_OVERVOLTAGE  = 5,  /* supply above over_mv for supply_ticks ticks in a row */
    RR_TRIP_UNDERVOLTAGE = 6,  /* supply below under_mv for supply_ticks ticks in a row */
    RR_TRIP_WRONG_WAY    = 7,  /* the encoder ran against the duty */
    RR_TRIP_OVERSPEED    = 8,  /* more than speed_counts in one window */
    RR_TRIP_STALL        = 9,  /* duty and no counts for stall_ticks */
    RR_TRIP_OVERLOAD     = 10,  /* the thermal model reached its limit */
    RR_TRIP_LINK_LOST    = 11,  /* no valid new line for the lease */
    RR_TRIP_LATE_ORDER   = 12,  /* an order came after its start tick */
    RR_TRIP_COUNT        = 13
};

/* X(NAME, "word", number, stop category) */
#define RR_TRIP_LIST(X) \
    X(NONE,         "none",         0,  0) \
    X(SELF_TEST,    "self_test",    1,  0) \
    X(RESTARTED,    "restarted",    2,  0) \
    X(LINE_BREAK,   "line_break",   3,  0) \
    X(OVERCURRENT,  "overcurrent",  4,  0) \
    X(OVERVOLTAGE,  "overvoltage",  5,  0) \
    X(UNDERVOLTAGE, "undervoltage", 6,  0) \
    X(WRONG_WAY,    "wrong_way",    7,  0) \
    X(OVERSPEED,    "overspeed",    8,  0) \
    X(STALL,        "stall",        9,  0) \
    X(OVERLOAD,     "overload",     10, 1) \
    X(LINK_LOST,    "link_lost",    11, 1) \
    X(LATE_ORDER,   "late_order",   12, 1)

#define RR_CAP_ENCODER       (1u << 0)  /* quadrature counts */
#define RR_CAP_CURRENT       (1u << 1)  /* current sense */
#define RR_CAP_SUPPLY        (1u << 2)  /* supply measurement */
#define RR_CAP_TEMPERATURE   (1u << 3)  /* temperature measurement */
#define RR_CAP_KEEPS_LIMITS  (1u << 4)  /* limits survive power-off */
#define RR_CAP_BREAK         (1u << 5)  /* BREAK on the receive line is detected */

enum rr_word {
    RR_WORD_WHO      = 0,  /* identity and capabilities */
    RR_WORD_BEAT     = 1,  /* renews the lease; its answer fits the clocks */
    RR_WORD_STATE    = 2,  /* what the device does and measures at this tick */
    RR_WORD_ARM      = 3,  /* enables the outputs under a lease */
    RR_WORD_DISARM   = 4,  /* normal end: outputs off, refused while the bridge is not at zero */
    RR_WORD_RAMP     = 5,  /* order: move an axis's demand linearly to a duty */
    RR_WORD_SWING    = 6,  /* order: move a servo's pulse linearly to a width; 0 switches its pulses off */
    RR_WORD_REST     = 7,  /* order: what the bridge does at zero duty */
    RR_WORD_STOP     = 8,  /* stop, category 0 or 1 */
    RR_WORD_CLEAR    = 9,  /* ends the latch of a trip */
    RR_WORD_WHY      = 10,  /* the last trip since boot with its values */
    RR_WORD_LIMIT    = 11,  /* reads a limit, or sets it */
    RR_WORD_LOG      = 12,  /* starts, changes or (period 0) ends sampling */
    RR_WORD_AGAIN    = 13,  /* sends a kept data line again */
    RR_WORD_TRAIL    = 14,  /* reads the fast record kept from around the last trip */
    RR_WORD_COUNTERS = 15,  /* running counts since boot */
    RR_WORD_COUNT    = 16
};

enum rr_notice {
    RR_NOTICE_BOOT    = 0,  /* the device has started */
    RR_NOTICE_WHO     = 1,  /* answer to a bare `who` */
    RR_NOTICE_STOP    = 2,  /* a stop has begun */
    RR_NOTICE_OFF     = 3,  /* all outputs are off */
    RR_NOTICE_TRIP    = 4,  /* a trip has latched */
    RR_NOTICE_DONE    = 5,  /* the order sent under this tag has been carried out */
    RR_NOTICE_DWELL   = 6,  /* the dwell lock has let go after holding a demand back */
    RR_NOTICE_GARBLED = 7,  /* a line was refused below the answers; the count since boot */
    RR_NOTICE_COUNT   = 8
};

enum rr_reason {
    RR_REASON_WORD   = 0,  /* no such request */
    RR_REASON_ARGS   = 1,  /* wrong number or spelling of the arguments */
    RR_REASON_RANGE  = 2,  /* an argument is outside its range or its limit */
    RR_REASON_INDEX  = 3,  /* no such axis, servo or index */
    RR_REASON_STATE  = 4,  /* not in this state */
    RR_REASON_TAG    = 5,  /* this tag was used last for another body */
    RR_REASON_DIGEST = 6,  /* the host's digest of the limits is not the device's */
    RR_REASON_ARMED  = 7,  /* a limit cannot be loosened while armed */
    RR_REASON_LATE   = 8,  /* the order's start tick has passed */
    RR_REASON_FAR    = 9,  /* the order's start lies beyond the horizon */
    RR_REASON_FULL   = 10,  /* the order queue is full */
    RR_REASON_MOVING = 11,  /* the bridge is not at zero */
    RR_REASON_CAUSE  = 12,  /* the cause of the trip persists */
    RR_REASON_GONE   = 13,  /* no longer, or not yet, kept */
    RR_REASON_COUNT  = 14
};

/* X(NAME, "word", "kinds of the arguments", states allowed as bits) */
#define RR_WORD_LIST(X) \
    X(WHO,      "who",      "",     0x0f) \
    X(BEAT,     "beat",     "",     0x0f) \
    X(STATE,    "state",    "",     0x0f) \
    X(ARM,      "arm",      "uh",   0x01) \
    X(DISARM,   "disarm",   "",     0x03) \
    X(RAMP,     "ramp",     "aint", 0x02) \
    X(SWING,    "swing",    "sunt", 0x02) \
    X(REST,     "rest",     "aRt",  0x02) \
    X(STOP,     "stop",     "u",    0x0f) \
    X(CLEAR,    "clear",    "",     0x08) \
    X(WHY,      "why",      "",     0x0f) \
    X(LIMIT,    "limit",    "Lui?", 0x0f) \
    X(LOG,      "log",      "nuF",  0x0f) \
    X(AGAIN,    "again",    "u",    0x0f) \
    X(TRAIL,    "trail",    "au",   0x0f) \
    X(COUNTERS, "counters", "",     0x0f)

/* X(NAME, "word") */
#define RR_NOTICE_LIST(X) \
    X(BOOT,    "boot") \
    X(WHO,     "who") \
    X(STOP,    "stop") \
    X(OFF,     "off") \
    X(TRIP,    "trip") \
    X(DONE,    "done") \
    X(DWELL,   "dwell") \
    X(GARBLED, "garbled")

/* X(NAME, "word") */
#define RR_REASON_LIST(X) \
    X(WORD,   "word") \
    X(ARGS,   "args") \
    X(RANGE,  "range") \
    X(INDEX,  "index") \
    X(STATE,  "state") \
    X(TAG,    "tag") \
    X(DIGEST, "digest") \
    X(ARMED,  "armed") \
    X(LATE,   "late") \
    X(FAR,    "far") \
    X(FULL,   "full") \
    X(MOVING, "moving") \
    X(CAUSE,  "cause") \
    X(GONE,   "gone")

enum rr_limit {
    RR_LIMIT_LEASE_MS       = 1,  /* ms: longest lease that `arm` may ask for */
    RR_LIMIT_STOP_TICKS     = 2,  /* ticks: longest category 1 stop; the bridge is cut at its end */
    RR_LIMIT_UNDER_MV       = 3,  /* mV: undervoltage; 0 = trip off */
    RR_LIMIT_OVER_MV        = 4,  /* mV: overvoltage */
    RR_LIMIT_SUPPLY_TICKS   = 5,  /* ticks: ticks in a row before a voltage trip */
    RR_LIMIT_CEILING_DUTY   = 16,  /* 1/10000: ceiling of the duty; at most the board's max_duty */
    RR_LIMIT_SLEW_UP_DUTY   = 17,  /* 1/10000 a tick: most the duty grows away from zero in a tick */
    RR_LIMIT_SLEW_DOWN_DUTY = 18,  /* 1/10000 a tick: most the duty falls towards zero in a tick */
    RR_LIMIT_DWELL_TICKS    = 19,  /* ticks: least time at zero before the other sign */
    RR_LIMIT_STILL_COUNTS   = 20,  /* counts: standstill: the counts stay within this band */
    RR_LIMIT_STILL_TICKS    = 21,  /* ticks: standstill: for this long */
    RR_LIMIT_SENSE          = 22,  /* sign: sign of the counts for positive duty; 0 = no encoder */
    RR_LIMIT_TRIP_MA        = 23,  /* mA: overcurrent */
    RR_LIMIT_TRIP_TICKS     = 24,  /* ticks: ticks in a row before the overcurrent trip */
    RR_LIMIT_OFFSET_MA      = 25,  /* mA: subtracted from every current reading */
    RR_LIMIT_RATED_MA       = 26,  /* mA: current that may flow for ever (k I_B of the thermal model); 0 = trip off */
    RR_LIMIT_THERMAL_S      = 27,  /* s: time constant of the thermal model */
    RR_LIMIT_STALL_DUTY     = 28,  /* 1/10000: duty from which motion is expected; 0 = stall and wrong-way trips off */
    RR_LIMIT_STALL_COUNTS   = 29,  /* counts: this much motion ends the stall timer */
    RR_LIMIT_STALL_TICKS    = 30,  /* ticks: ticks without motion before the stall trip */
    RR_LIMIT_WRONG_COUNTS   = 31,  /* counts: counts against the duty before the wrong-way trip */
    RR_LIMIT_SPEED_COUNTS   = 32,  /* counts in SPEED_TICKS: overspeed; 0 = trip off */
    RR_LIMIT_PULSE_MIN_US   = 48,  /* us: shortest pulse */
    RR_LIMIT_PULSE_MAX_US   = 49,  /* us: longest pulse */
    RR_LIMIT_PULSE_SLEW_NS  = 50,  /* ns a tick: most the pulse changes in a tick */
    RR_LIMIT_PULSE_HOME_US  = 51   /* us: first pulse after none */
};

enum rr_per {
    RR_PER_DEVICE = 0,  /* one */
    RR_PER_AXIS   = 1,  /* one an axis */
    RR_PER_SERVO  = 2   /* one a servo */
};

enum rr_tighter {
    RR_TIGHTER_NONE   = 0,  /* not while armed */
    RR_TIGHTER_LOWER  = 1,  /* less is tighter */
    RR_TIGHTER_HIGHER = 2   /* more is tighter */
};

/* X(NAME, "word", number, RR_PER_..., least, greatest, default, RR_TIGHTER_...) */
#define RR_LIMIT_LIST(X) \
    X(LEASE_MS,       "lease_ms",       1,  DEVICE, 50,    5000,     500,   LOWER) \
    X(STOP_TICKS,     "stop_ticks",     2,  DEVICE, 1,     5000,     500,   LOWER) \
    X(UNDER_MV,       "under_mv",       3,  DEVICE, 0,     65000L,   9000,  HIGHER) \
    X(OVER_MV,        "over_mv",        4,  DEVICE, 1000,  65000L,   16000, LOWER) \
    X(SUPPLY_TICKS,   "supply_ticks",   5,  DEVICE, 1,     1000,     5,     LOWER) \
    X(CEILING_DUTY,   "ceiling_duty",   16, AXIS,   0,     10000,    3000,  LOWER) \
    X(SLEW_UP_DUTY,   "slew_up_duty",   17, AXIS,   1,     10000,    20,    LOWER) \
    X(SLEW_DOWN_DUTY, "slew_down_duty", 18, AXIS,   1,     10000,    40,    NONE) \
    X(DWELL_TICKS,    "dwell_ticks",    19, AXIS,   1,     60000L,   250,   HIGHER) \
    X(STILL_COUNTS,   "still_counts",   20, AXIS,   0,     10000,    2,     LOWER) \
    X(STILL_TICKS,    "still_ticks",    21, AXIS,   1,     10000,    50,    HIGHER) \
    X(SENSE,          "sense",          22, AXIS,   -1,    1,        1,     NONE) \
    X(TRIP_MA,        "trip_ma",        23, AXIS,   1,     130000L,  2000,  LOWER) \
    X(TRIP_TICKS,     "trip_ticks",     24, AXIS,   1,     1000,     5,     LOWER) \
    X(OFFSET_MA,      "offset_ma",      25, AXIS,   -5000, 5000,     0,     NONE) \
    X(RATED_MA,       "rated_ma",       26, AXIS,   0,     65535L,   1000,  NONE) \
    X(THERMAL_S,      "thermal_s",      27, AXIS,   1,     10000,    60,    NONE) \
    X(STALL_DUTY,     "stall_duty",     28, AXIS,   0,     10000,    1500,  LOWER) \
    X(STALL_COUNTS,   "stall_counts",   29, AXIS,   1,     10000,    4,     HIGHER) \
    X(STALL_TICKS,    "stall_ticks",    30, AXIS,   1,     60000L,   300,   LOWER) \
    X(WRONG_COUNTS,   "wrong_counts",   31, AXIS,   1,     100000L,  24,    LOWER) \
    X(SPEED_COUNTS,   "speed_counts",   32, AXIS,   0,     1000000L, 0,     LOWER) \
    X(PULSE_MIN_US,   "pulse_min_us",   48, SERVO,  400,   2600,     1100,  HIGHER) \
    X(PULSE_MAX_US,   "pulse_max_us",   49, SERVO,  400,   2600,     1900,  LOWER) \
    X(PULSE_SLEW_NS,  "pulse_slew_ns",  50, SERVO,  1,     2000000L, 500,   LOWER) \
    X(PULSE_HOME_US,  "pulse_home_us",  51, SERVO,  400,   2600,     1500,  NONE)

/* X(NAME, RR_PER_..., first bit of the mask, step, width, order of the difference) */
#define RR_CHANNEL_LIST(X) \
    X(DUTY,           AXIS,   0,  3, 15, 2) \
    X(COUNTS,         AXIS,   1,  3, 32, 2) \
    X(CURRENT_MA,     AXIS,   2,  3, 18, 1) \
    X(PULSE_US,       SERVO,  12, 1, 14, 1) \
    X(SUPPLY_MV,      DEVICE, 16, 0, 18, 1) \
    X(TEMPERATURE_DC, DEVICE, 17, 0, 13, 1) \
    X(STATE,          DEVICE, 18, 0, 16, 1)

#define RR_BITS_STATE_LOW       0  /* number of the state */
#define RR_BITS_STATE_MASK      0x3u  /* after shifting down */
#define RR_BITS_DWELL_LOCK_LOW  2  /* a dwell lock holds a demand back */
#define RR_BITS_DWELL_LOCK_MASK 0x1u  /* after shifting down */
#define RR_BITS_AT_CEILING_LOW  3  /* a ceiling cuts a demand */
#define RR_BITS_AT_CEILING_MASK 0x1u  /* after shifting down */
#define RR_BITS_AT_SLEW_LOW     4  /* a slew limit holds a duty or pulse back */
#define RR_BITS_AT_SLEW_MASK    0x1u  /* after shifting down */
#define RR_BITS_BRAKING_LOW     5  /* an axis rests braked at zero */
#define RR_BITS_BRAKING_MASK    0x1u  /* after shifting down */
#define RR_BITS_TRIP_LOW        8  /* number of the latched trip */
#define RR_BITS_TRIP_MASK       0xfu  /* after shifting down */

#endif
