/* Seeded bugs: faults put in on purpose, to see that the proofs and tests bite. `-DRR_SEEDED_BUG=n` builds the core with
 * the bug of that number; a normal build has none, and RR_SEEDED is then its last argument.
 *
 * proofs/README.md has the table of what catches each. */
#ifndef RAMPRIG_SEEDED_H
#define RAMPRIG_SEEDED_H

/* X(number, NAME, clause it breaks, what is wrong) */
#define RR_SEEDED_LIST(X) \
    X(1,  CEILING_ONE_SIDED,      "S1",      "the ceiling does not hold negative duty") \
    X(2,  SLEW_DOUBLED,           "S2",      "the duty grows by twice the slew limit") \
    X(3,  START_UNGUARDED,        "S3",      "the first motion after start waits for neither dwell nor standstill") \
    X(4,  DWELL_FROM_COMMAND,     "S3",      "the dwell is counted while the duty still falls") \
    X(5,  STANDSTILL_IGNORED,     "S3",      "the shaft may still turn when the dwell lets go") \
    X(6,  REPEAT_RENEWS,          "LEASE-1", "a repeated line renews the lease") \
    X(7,  LEASE_FORGOTTEN,        "S4",      "a lost link does not stop anything") \
    X(8,  STOP_NEVER_CUT,         "S4",      "a category 1 stop may last longer than stop_ticks") \
    X(9,  TRIP_CLEARS_ITSELF,     "S5",      "a trip's latch is gone when its stop has ended") \
    X(10, CLEAR_DESPITE_CAUSE,    "CLEAR-1", "clear is answered ok while the cause persists") \
    X(11, LOOSER_WHILE_ARMED,     "S6",      "a limit may be loosened while armed") \
    X(12, ARM_ON_ANY_DIGEST,      "S6",      "arm does not compare the digest") \
    X(13, SERVO_PAST_ITS_END,     "S7",      "a servo's goal is not held inside its limits") \
    X(14, OVERCURRENT_LATE,       "TRIP-3",  "overcurrent trips one tick late") \
    X(15, LATE_ORDER_CARRIED_OUT, "ORDER-2", "a late order is carried out at once") \
    X(16, MEMORY_FORGETS,         "TAG-3",   "a repeated line is carried out again") \
    X(17, SQUARE_IN_INT,          "TRIP-8",  "the square of the current is made in an int, which overflows") \
    X(18, LINE_ONE_TOO_LONG,      "LINE-5",  "one byte too many goes into the line buffer")

#ifndef RR_SEEDED_BUG
#define RR_SEEDED_BUG 0
#endif

#if RR_SEEDED_BUG == 0
#define RR_SEEDED(NAME, bug, right) (right)
#else
#define RR_SEEDED_NUMBER(number, NAME, clause, text) RR_BUG_##NAME = number,
enum rr_seeded { RR_SEEDED_LIST(RR_SEEDED_NUMBER) RR_BUG_COUNT };
#undef RR_SEEDED_NUMBER
#define RR_SEEDED(NAME, bug, right) (RR_SEEDED_BUG == RR_BUG_##NAME ? (bug) : (right))
#endif

#endif
