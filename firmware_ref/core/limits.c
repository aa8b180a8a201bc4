/* The limits; see limits.h. */
#include "limits.h"

#include "check.h"
#include "kept.h"

#include <stddef.h>

/* A row's rules, beside its width in the lower three bits. */
#define WIDTH       7u
#define TIGHTER     3u /* two bits for enum rr_tighter, from this one on */
#define HUNDREDS    0x20u /* `greatest` is in hundreds */
#define ZERO_IS_OFF 0x40u /* 0 means "trip off", so it is looser than every other value (LIMIT-3) */

struct row {
    int16_t least;
    uint16_t greatest;
    int16_t standard;
    uint8_t offset; /* in its struct */
    uint8_t rules;
};

/* Where each limit is kept. */
#define OF_BOARD(member, width) offsetof(struct rr_board_limits, member), width
#define OF_AXIS(member, width)  offsetof(struct rr_axis_limits, member), width
#define OF_SERVO(member, width) offsetof(struct rr_servo_limits, member), width
#define KEPT_LEASE_MS       OF_BOARD(lease_ms, RR_U16)
#define KEPT_STOP_TICKS     OF_BOARD(stop_ticks, RR_U16)
#define KEPT_UNDER_MV       OF_BOARD(under_mv, RR_U16 | ZERO_IS_OFF)
#define KEPT_OVER_MV        OF_BOARD(over_mv, RR_U16)
#define KEPT_SUPPLY_TICKS   OF_BOARD(supply_ticks, RR_U16)
#define KEPT_CEILING_DUTY   OF_AXIS(chain.ceiling_duty, RR_I16)
#define KEPT_SLEW_UP_DUTY   OF_AXIS(chain.slew_up_duty, RR_I16)
#define KEPT_SLEW_DOWN_DUTY OF_AXIS(chain.slew_down_duty, RR_I16)
#define KEPT_DWELL_TICKS    OF_AXIS(chain.dwell_ticks, RR_U16)
#define KEPT_STILL_COUNTS   OF_AXIS(chain.still_counts, RR_I16)
#define KEPT_STILL_TICKS    OF_AXIS(chain.still_ticks, RR_U16)
#define KEPT_SENSE          OF_AXIS(chain.sense, RR_I8)
#define KEPT_TRIP_MA        OF_AXIS(guard.trip_ma, RR_I32)
#define KEPT_TRIP_TICKS     OF_AXIS(guard.trip_ticks, RR_U16)
#define KEPT_OFFSET_MA      OF_AXIS(guard.offset_ma, RR_I16)
#define KEPT_RATED_MA       OF_AXIS(guard.rated_ma, RR_U16)
#define KEPT_THERMAL_S      OF_AXIS(guard.thermal_s, RR_U16)
#define KEPT_STALL_DUTY     OF_AXIS(guard.stall_duty, RR_I16 | ZERO_IS_OFF)
#define KEPT_STALL_COUNTS   OF_AXIS(guard.stall_counts, RR_I16)
#define KEPT_STALL_TICKS    OF_AXIS(guard.stall_ticks, RR_U16)
#define KEPT_WRONG_COUNTS   OF_AXIS(guard.wrong_counts, RR_I32)
#define KEPT_SPEED_COUNTS   OF_AXIS(guard.speed_counts, RR_I32 | ZERO_IS_OFF)
#define KEPT_PULSE_MIN_US   OF_SERVO(least_ns, RR_US_AS_NS)
#define KEPT_PULSE_MAX_US   OF_SERVO(greatest_ns, RR_US_AS_NS)
#define KEPT_PULSE_SLEW_NS  OF_SERVO(slew_ns, RR_NS)
#define KEPT_PULSE_HOME_US  OF_SERVO(home_ns, RR_US_AS_NS)

/* The board's own greatest duty is the ceiling's. */
#define WITHIN_BOARD(NAME, value) (RR_LIMIT_##NAME == RR_LIMIT_CEILING_DUTY && (value) > RR_MAX_DUTY ? RR_MAX_DUTY : (value))
#define IS_LARGE(greatest) ((greatest) > 65535)

#define ROW(NAME, word, number, per, least, greatest, standard, tighter) \
    {least, (uint16_t)(WITHIN_BOARD(NAME, greatest) / (IS_LARGE(greatest) ? 100 : 1)), WITHIN_BOARD(NAME, standard), \
     KEPT_##NAME | RR_TIGHTER_##tighter << TIGHTER | (IS_LARGE(greatest) ? HUNDREDS : 0)},
static const RR_FLASH struct row rows[] = {RR_LIMIT_LIST(ROW)};
#undef ROW

#define WHOLE(NAME, word, number, per, least, greatest, standard, tighter) \
    _Static_assert(!IS_LARGE(greatest) || ((greatest) % 100 == 0 && (greatest) / 100 <= 65535), "kept in hundreds");
RR_LIMIT_LIST(WHOLE)
#undef WHOLE

#define ROWS (sizeof rows / sizeof rows[0])
_Static_assert(ROWS == RR_DEVICE_LIMITS + RR_AXIS_LIMITS + RR_SERVO_LIMITS, "config.h counts the limits");
_Static_assert(sizeof(struct rr_axis_limits) < 256, "a row's offset is a byte");

uint8_t rr_limits_place_in_row(uint8_t row, uint32_t index)
{
    uint8_t first = row;
    uint8_t many = 1;
    if (row >= RR_DEVICE_LIMITS + RR_AXIS_LIMITS) {
        first = rr_limits_servo_place((uint8_t)(row - RR_DEVICE_LIMITS - RR_AXIS_LIMITS + RR_LIMIT_PULSE_MIN_US), 0);
        many = RR_SERVOS;
    } else if (row >= RR_DEVICE_LIMITS) {
        first = rr_limits_axis_place((uint8_t)(row - RR_DEVICE_LIMITS + RR_LIMIT_CEILING_DUTY), 0);
        many = RR_AXES;
    }
    return index < many ? (uint8_t)(first + index) : RR_LIMITS;
}

/* What stands at a place that exists. */
struct spot {
    const RR_FLASH struct row *row;
    const uint8_t *kept;
    uint8_t axis;
};

static struct spot spot_at(const struct rr_limits *limits, uint8_t place)
{
    struct spot spot = {rows, (const uint8_t *)&limits->board, 0};
    uint8_t row = place;
    if (place >= RR_LIMITS - RR_SERVO_LIMITS * RR_SERVOS) {
#if RR_SERVOS > 0
        place = (uint8_t)(place - (RR_LIMITS - RR_SERVO_LIMITS * RR_SERVOS));
        row = (uint8_t)(RR_DEVICE_LIMITS + RR_AXIS_LIMITS + place / RR_SERVOS);
        spot.kept = (const uint8_t *)&limits->servo[place % RR_SERVOS];
#endif
    } else if (place >= RR_DEVICE_LIMITS) {
        place = (uint8_t)(place - RR_DEVICE_LIMITS);
        spot.axis = place % RR_AXES;
        row = (uint8_t)(RR_DEVICE_LIMITS + place / RR_AXES);
        spot.kept = (const uint8_t *)&limits->axis[spot.axis];
    }
    spot.row += row; /* only now: a place may lie beyond the rows, and a pointer must not */
    spot.kept += spot.row->offset;
    return spot;
}

int32_t rr_limits_at(const struct rr_limits *limits, uint8_t place)
{
    const struct rr_set_limit *set = limits->set;
    for (uint8_t left = limits->set_count; left != 0; left--, set++) {
        if (set->place == place) {
            return set->value;
        }
    }
    struct spot spot = spot_at(limits, place);
    return rr_kept_read(spot.kept, spot.row->rules & WIDTH);
}

static void enforce(struct rr_limits *limits, uint8_t place, int32_t value)
{
    struct spot spot = spot_at(limits, place);
    rr_kept_write((uint8_t *)limits + (spot.kept - (const uint8_t *)limits), spot.row->rules & WIDTH, value);
    struct rr_axis_limits *axis = &limits->axis[spot.axis];
    if (spot.row == rows + rr_limits_row(RR_LIMIT_THERMAL_S)) {
        axis->guard.gain = rr_guard_gain(axis->guard.thermal_s);
    }
    axis->guard.sense = axis->chain.sense;
}

bool rr_limits_is_looser(const struct rr_limits *limits, uint8_t place, int32_t now, int32_t value)
{
    uint8_t rules = spot_at(limits, place).row->rules;
    uint8_t tighter = (uint8_t)(rules >> TIGHTER) & 3u;
    if ((rules & ZERO_IS_OFF) != 0 && (value == 0 || now == 0)) {
        return value == 0;
    }
    return tighter == RR_TIGHTER_NONE || (value > now) == (tighter == RR_TIGHTER_LOWER);
}

/* Outside the item's own range, or the board's? */
bool rr_limits_possible(const struct rr_limits *limits, uint8_t place, int32_t value)
{
    const RR_FLASH struct row *row = spot_at(limits, place).row;
    int32_t greatest = row->greatest;
    if ((row->rules & HUNDREDS) != 0) {
        greatest *= 100;
    }
    return value >= row->least && value <= greatest;
}

bool rr_limits_is_out(const struct rr_limits *limits, uint8_t place, int32_t value)
{
    if (!rr_limits_possible(limits, place, value)) {
        return true;
    }
    uint8_t least = rr_limits_servo_place(RR_LIMIT_PULSE_MIN_US, 0); /* after it come the greatest pulses */
    if (place < least || place >= least + 2 * RR_SERVOS) {
        return false;
    }
    return place < least + RR_SERVOS ? value > rr_limits_at(limits, (uint8_t)(place + RR_SERVOS))
                                     : value < rr_limits_at(limits, (uint8_t)(place - RR_SERVOS));
}

void rr_limits_defaults(struct rr_limits *limits)
{
    limits->set_count = 0;
    limits->digest_place = 0;
    for (uint8_t place = 0; place < RR_LIMITS; place++) {
        enforce(limits, place, spot_at(limits, place).row->standard);
    }
}

void rr_limits_set(struct rr_limits *limits, uint8_t place, int32_t value)
{
    struct rr_set_limit *set = limits->set;
    uint8_t left = limits->set_count;
    while (left != 0 && set->place != place) {
        left--;
        set++;
    }
    if (left == 0) {
        limits->set_count++;
    }
    set->place = place;
    set->value = value;
    limits->digest_place = 0;
}

void rr_limits_enforce(struct rr_limits *limits)
{
    const struct rr_set_limit *set = limits->set;
    for (; limits->set_count != 0; limits->set_count--, set++) {
        enforce(limits, set->place, set->value);
    }
}

_Static_assert(RR_LIMIT_PULSE_MAX_US == RR_LIMIT_PULSE_MIN_US + 1, "rr_limits_is_out");

bool rr_limits_digest_step(struct rr_limits *limits)
{
    if (limits->digest_place == RR_LIMITS) {
        return false;
    }
    uint32_t crc = limits->digest_place == 0 ? RR_CRC32_START : ~limits->digest;
    uint32_t value = (uint32_t)rr_limits_at(limits, limits->digest_place);
    for (int8_t shift = 24; shift >= 0; shift = (int8_t)(shift - 8)) {
        crc = rr_crc32(crc, (uint8_t)(value >> shift));
    }
    limits->digest = ~crc;
    limits->digest_place++;
    return true;
}
