/* The limits; see limits.h. */
#include "limits.h"

#include "check.h"

#include <stddef.h>

/* How a limit is kept: as narrow as its range allows. */
enum width { I8, I16, U16, I32, US_AS_NS };

struct row {
    int32_t least;
    int32_t greatest;
    int32_t standard;
    uint8_t number;
    uint8_t per;
    uint8_t tighter;
    uint8_t offset; /* in its struct */
    uint8_t width;
};

/* Where each limit is kept. */
#define OF_BOARD(member, width) offsetof(struct rr_board_limits, member), width
#define OF_AXIS(member, width)  offsetof(struct rr_axis_limits, member), width
#define OF_SERVO(member, width) offsetof(struct rr_servo_limits, member), width
#define KEPT_LEASE_MS       OF_BOARD(lease_ms, U16)
#define KEPT_STOP_TICKS     OF_BOARD(stop_ticks, U16)
#define KEPT_UNDER_MV       OF_BOARD(under_mv, U16)
#define KEPT_OVER_MV        OF_BOARD(over_mv, U16)
#define KEPT_SUPPLY_TICKS   OF_BOARD(supply_ticks, U16)
#define KEPT_CEILING_DUTY   OF_AXIS(chain.ceiling_duty, I16)
#define KEPT_SLEW_UP_DUTY   OF_AXIS(chain.slew_up_duty, I16)
#define KEPT_SLEW_DOWN_DUTY OF_AXIS(chain.slew_down_duty, I16)
#define KEPT_DWELL_TICKS    OF_AXIS(chain.dwell_ticks, U16)
#define KEPT_STILL_COUNTS   OF_AXIS(chain.still_counts, I16)
#define KEPT_STILL_TICKS    OF_AXIS(chain.still_ticks, U16)
#define KEPT_SENSE          OF_AXIS(chain.sense, I8)
#define KEPT_TRIP_MA        OF_AXIS(guard.trip_ma, I32)
#define KEPT_TRIP_TICKS     OF_AXIS(guard.trip_ticks, U16)
#define KEPT_OFFSET_MA      OF_AXIS(guard.offset_ma, I16)
#define KEPT_RATED_MA       OF_AXIS(guard.rated_ma, U16)
#define KEPT_THERMAL_S      OF_AXIS(guard.thermal_s, U16)
#define KEPT_STALL_DUTY     OF_AXIS(guard.stall_duty, I16)
#define KEPT_STALL_COUNTS   OF_AXIS(guard.stall_counts, I16)
#define KEPT_STALL_TICKS    OF_AXIS(guard.stall_ticks, U16)
#define KEPT_WRONG_COUNTS   OF_AXIS(guard.wrong_counts, I32)
#define KEPT_SPEED_COUNTS   OF_AXIS(guard.speed_counts, I32)
#define KEPT_PULSE_MIN_US   OF_SERVO(least_ns, US_AS_NS)
#define KEPT_PULSE_MAX_US   OF_SERVO(greatest_ns, US_AS_NS)
#define KEPT_PULSE_SLEW_NS  OF_SERVO(slew_ns, I32)
#define KEPT_PULSE_HOME_US  OF_SERVO(home_ns, US_AS_NS)

#define ROW(NAME, word, number, per, least, greatest, standard, tighter) \
    {least, greatest, standard, number, RR_PER_##per, RR_TIGHTER_##tighter, KEPT_##NAME},
static const RR_FLASH struct row rows[] = {RR_LIMIT_LIST(ROW)};
#undef ROW

#define ROWS (sizeof rows / sizeof rows[0])
_Static_assert(ROWS == RR_DEVICE_LIMITS + RR_AXIS_LIMITS + RR_SERVO_LIMITS, "config.h counts the limits");
_Static_assert(sizeof(struct rr_axis_limits) < 256, "a row's offset is a byte");

static uint8_t fitted(uint8_t per)
{
    return per == RR_PER_AXIS ? RR_AXES : per == RR_PER_SERVO ? RR_SERVOS : 1;
}

uint8_t rr_limits_place(uint8_t number, uint32_t index)
{
    uint8_t place = 0;
    for (uint8_t i = 0; i < ROWS; i++) {
        uint8_t many = fitted(rows[i].per);
        if (rows[i].number == number) {
            return index < many ? (uint8_t)(place + index) : RR_LIMITS;
        }
        place = (uint8_t)(place + many);
    }
    return RR_LIMITS;
}

/* The row of a place that exists; the index by `index`. The rows of the device come first, then axes, then servos. */
static const RR_FLASH struct row *row_at(uint8_t place, uint8_t *index)
{
    const RR_FLASH struct row *row = rows;
    *index = 0;
    if (place < RR_DEVICE_LIMITS) {
        return row + place;
    }
    row += RR_DEVICE_LIMITS;
    place = (uint8_t)(place - RR_DEVICE_LIMITS);
    if (place < RR_AXIS_LIMITS * RR_AXES) {
        *index = place % RR_AXES;
        return row + place / RR_AXES;
    }
#if RR_SERVOS > 0
    row += RR_AXIS_LIMITS;
    place = (uint8_t)(place - RR_AXIS_LIMITS * RR_AXES);
    *index = place % RR_SERVOS;
    row += place / RR_SERVOS;
#endif
    return row;
}

/* Where the value of a row and index is kept. */
static const void *kept_at(const struct rr_limits *limits, const RR_FLASH struct row *row, uint8_t index)
{
    const uint8_t *start = (const uint8_t *)&limits->board;
    if (row->per == RR_PER_AXIS) {
        start = (const uint8_t *)&limits->axis[index];
    }
#if RR_SERVOS > 0
    if (row->per == RR_PER_SERVO) {
        start = (const uint8_t *)&limits->servo[index];
    }
#endif
    return start + row->offset;
}

int32_t rr_limits_at(const struct rr_limits *limits, uint8_t place)
{
    for (uint8_t i = 0; i < limits->set_count; i++) {
        if (limits->set[i].place == place) {
            return limits->set[i].value;
        }
    }
    uint8_t index;
    const RR_FLASH struct row *row = row_at(place, &index);
    const void *kept = kept_at(limits, row, index);
    switch (row->width) {
    case I8:
        return *(const int8_t *)kept;
    case I16:
        return *(const int16_t *)kept;
    case U16:
        return *(const uint16_t *)kept;
    case US_AS_NS:
        return *(const int32_t *)kept / 1000;
    default:
        return *(const int32_t *)kept;
    }
}

static void enforce(struct rr_limits *limits, uint8_t place, int32_t value)
{
    uint8_t index;
    const RR_FLASH struct row *row = row_at(place, &index);
    void *kept = (uint8_t *)limits + ((const uint8_t *)kept_at(limits, row, index) - (const uint8_t *)limits);
    switch (row->width) {
    case I8:
        *(int8_t *)kept = (int8_t)value;
        break;
    case I16:
        *(int16_t *)kept = (int16_t)value;
        break;
    case U16:
        *(uint16_t *)kept = (uint16_t)value;
        break;
    case US_AS_NS:
        *(int32_t *)kept = value * 1000;
        break;
    default:
        *(int32_t *)kept = value;
        break;
    }
    if (row->number == RR_LIMIT_THERMAL_S) {
        limits->axis[index].guard.gain = rr_guard_gain((uint16_t)value);
    } else if (row->number == RR_LIMIT_SENSE) {
        limits->axis[index].guard.sense = (int8_t)value;
    }
}

int32_t rr_limits_get(const struct rr_limits *limits, uint8_t number, uint8_t index)
{
    return rr_limits_at(limits, rr_limits_place(number, index));
}

/* Where 0 means "trip off" it is looser than every other value (LIMIT-3). */
static bool zero_is_off(uint8_t number)
{
    return number == RR_LIMIT_UNDER_MV || number == RR_LIMIT_RATED_MA || number == RR_LIMIT_STALL_DUTY ||
           number == RR_LIMIT_SPEED_COUNTS;
}

bool rr_limits_is_looser(uint8_t place, int32_t now, int32_t value)
{
    uint8_t index;
    const RR_FLASH struct row *row = row_at(place, &index);
    if (value == now) {
        return false;
    }
    if (zero_is_off(row->number) && (value == 0 || now == 0) && row->tighter != RR_TIGHTER_NONE) {
        return value == 0;
    }
    if (row->tighter == RR_TIGHTER_LOWER) {
        return value > now;
    }
    return row->tighter == RR_TIGHTER_HIGHER ? value < now : true;
}

/* Outside the item's own range, or the board's? */
static bool is_beyond(const RR_FLASH struct row *row, int32_t value)
{
    return value < row->least || value > row->greatest || (row->number == RR_LIMIT_CEILING_DUTY && value > RR_MAX_DUTY);
}

bool rr_limits_possible(uint8_t place, int32_t value)
{
    uint8_t index;
    return !is_beyond(row_at(place, &index), value);
}

bool rr_limits_is_out(const struct rr_limits *limits, uint8_t number, uint8_t index, int32_t value)
{
    if (!rr_limits_possible(rr_limits_place(number, index), value)) {
        return true;
    }
    switch (number) {
    case RR_LIMIT_PULSE_MIN_US:
        return value > rr_limits_get(limits, RR_LIMIT_PULSE_MAX_US, index);
    case RR_LIMIT_PULSE_MAX_US:
        return value < rr_limits_get(limits, RR_LIMIT_PULSE_MIN_US, index);
    default:
        return false;
    }
}

void rr_limits_defaults(struct rr_limits *limits)
{
    limits->set_count = 0;
    limits->digest_place = 0;
    for (uint8_t place = 0; place < RR_LIMITS; place++) {
        uint8_t index;
        const RR_FLASH struct row *row = row_at(place, &index);
        bool ceiling = row->number == RR_LIMIT_CEILING_DUTY && row->standard > RR_MAX_DUTY;
        enforce(limits, place, ceiling ? RR_MAX_DUTY : row->standard);
    }
}

void rr_limits_set(struct rr_limits *limits, uint8_t place, int32_t value)
{
    uint8_t at = 0;
    while (at < limits->set_count && limits->set[at].place != place) {
        at++;
    }
    limits->set[at].place = place;
    limits->set[at].value = value;
    if (at == limits->set_count) {
        limits->set_count++;
    }
    limits->digest_place = 0;
}

void rr_limits_enforce(struct rr_limits *limits)
{
    for (uint8_t i = 0; i < limits->set_count; i++) {
        enforce(limits, limits->set[i].place, limits->set[i].value);
    }
    limits->set_count = 0;
}

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
