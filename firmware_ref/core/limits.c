/* The limits; see limits.h. */
#include "limits.h"

#include "check.h"

struct row {
    uint8_t number;
    uint8_t per;
    int32_t least;
    int32_t greatest;
    int32_t standard;
    uint8_t tighter;
};

#define ROW(NAME, word, number, per, least, greatest, standard, tighter) \
    {number, RR_PER_##per, least, greatest, standard, RR_TIGHTER_##tighter},
static const struct row rows[] = {RR_LIMIT_LIST(ROW)};
#undef ROW

#define ROWS (sizeof rows / sizeof rows[0])
_Static_assert(ROWS == RR_DEVICE_LIMITS + RR_AXIS_LIMITS + RR_SERVO_LIMITS, "config.h counts the limits");

static uint8_t fitted(uint8_t per)
{
    return per == RR_PER_AXIS ? RR_AXES : per == RR_PER_SERVO ? RR_SERVOS : 1;
}

static const struct row *row_of(uint8_t number)
{
    for (uint8_t i = 0; i < ROWS; i++) {
        if (rows[i].number == number) {
            return &rows[i];
        }
    }
    return &rows[0];
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

int32_t rr_limits_get(const struct rr_limits *limits, uint8_t number, uint8_t index)
{
    return limits->value[rr_limits_place(number, index)];
}

/* Where 0 means "trip off" it is looser than every other value (LIMIT-3). */
static bool zero_is_off(uint8_t number)
{
    return number == RR_LIMIT_UNDER_MV || number == RR_LIMIT_RATED_MA || number == RR_LIMIT_STALL_DUTY ||
           number == RR_LIMIT_SPEED_COUNTS;
}

static bool is_looser(const struct row *row, int32_t now, int32_t value)
{
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

static bool is_out_of_range(const struct rr_limits *limits, const struct row *row, uint8_t index, int32_t value)
{
    if (value < row->least || value > row->greatest) {
        return true;
    }
    switch (row->number) {
    case RR_LIMIT_CEILING_DUTY:
        return value > RR_MAX_DUTY;
    case RR_LIMIT_PULSE_MIN_US:
        return value > rr_limits_get(limits, RR_LIMIT_PULSE_MAX_US, index);
    case RR_LIMIT_PULSE_MAX_US:
        return value < rr_limits_get(limits, RR_LIMIT_PULSE_MIN_US, index);
    default:
        return false;
    }
}

uint8_t rr_limits_refusal(const struct rr_limits *limits, uint8_t number, uint32_t index, int32_t value, bool armed)
{
    uint8_t place = rr_limits_place(number, index);
    if (place == RR_LIMITS) {
        return RR_REASON_INDEX;
    }
    const struct row *row = row_of(number);
    if (is_out_of_range(limits, row, (uint8_t)index, value)) {
        return RR_REASON_RANGE;
    }
    return armed && is_looser(row, limits->value[place], value) ? RR_REASON_ARMED : RR_REASON_COUNT;
}

void rr_limits_defaults(struct rr_limits *limits)
{
    uint8_t place = 0;
    for (uint8_t i = 0; i < ROWS; i++) {
        int32_t value = rows[i].standard;
        if (rows[i].number == RR_LIMIT_CEILING_DUTY && value > RR_MAX_DUTY) {
            value = RR_MAX_DUTY;
        }
        for (uint8_t index = 0; index < fitted(rows[i].per); index++) {
            limits->value[place++] = value;
        }
    }
}

uint32_t rr_limits_digest(const struct rr_limits *limits)
{
    uint32_t crc = RR_CRC32_START;
    for (uint8_t place = 0; place < RR_LIMITS; place++) {
        uint32_t value = (uint32_t)limits->value[place];
        for (int8_t shift = 24; shift >= 0; shift = (int8_t)(shift - 8)) {
            crc = rr_crc32(crc, (uint8_t)(value >> shift));
        }
    }
    return ~crc;
}

void rr_limits_board(const struct rr_limits *limits, struct rr_board_limits *board)
{
    board->under_mv = rr_limits_get(limits, RR_LIMIT_UNDER_MV, 0);
    board->over_mv = rr_limits_get(limits, RR_LIMIT_OVER_MV, 0);
    board->supply_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_SUPPLY_TICKS, 0);
    board->stop_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_STOP_TICKS, 0);
}

void rr_limits_chain(const struct rr_limits *limits, uint8_t axis, struct rr_chain_limits *chain)
{
    chain->ceiling_duty = (int16_t)rr_limits_get(limits, RR_LIMIT_CEILING_DUTY, axis);
    chain->slew_up_duty = (int16_t)rr_limits_get(limits, RR_LIMIT_SLEW_UP_DUTY, axis);
    chain->slew_down_duty = (int16_t)rr_limits_get(limits, RR_LIMIT_SLEW_DOWN_DUTY, axis);
    chain->dwell_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_DWELL_TICKS, axis);
    chain->still_counts = (int16_t)rr_limits_get(limits, RR_LIMIT_STILL_COUNTS, axis);
    chain->still_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_STILL_TICKS, axis);
    chain->sense = (int8_t)rr_limits_get(limits, RR_LIMIT_SENSE, axis);
}

void rr_limits_guard(const struct rr_limits *limits, uint8_t axis, struct rr_guard_limits *guard)
{
    guard->offset_ma = (int16_t)rr_limits_get(limits, RR_LIMIT_OFFSET_MA, axis);
    guard->trip_ma = rr_limits_get(limits, RR_LIMIT_TRIP_MA, axis);
    guard->trip_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_TRIP_TICKS, axis);
    guard->rated_ma = (uint16_t)rr_limits_get(limits, RR_LIMIT_RATED_MA, axis);
    guard->gain = rr_guard_gain((uint32_t)rr_limits_get(limits, RR_LIMIT_THERMAL_S, axis));
    guard->stall_duty = (int16_t)rr_limits_get(limits, RR_LIMIT_STALL_DUTY, axis);
    guard->stall_counts = (int16_t)rr_limits_get(limits, RR_LIMIT_STALL_COUNTS, axis);
    guard->stall_ticks = (uint16_t)rr_limits_get(limits, RR_LIMIT_STALL_TICKS, axis);
    guard->wrong_counts = rr_limits_get(limits, RR_LIMIT_WRONG_COUNTS, axis);
    guard->speed_counts = rr_limits_get(limits, RR_LIMIT_SPEED_COUNTS, axis);
    guard->sense = (int8_t)rr_limits_get(limits, RR_LIMIT_SENSE, axis);
}

void rr_limits_servo(const struct rr_limits *limits, uint8_t servo, struct rr_servo_limits *pulse)
{
    pulse->least_ns = rr_limits_get(limits, RR_LIMIT_PULSE_MIN_US, servo) * 1000;
    pulse->greatest_ns = rr_limits_get(limits, RR_LIMIT_PULSE_MAX_US, servo) * 1000;
    pulse->slew_ns = rr_limits_get(limits, RR_LIMIT_PULSE_SLEW_NS, servo);
    pulse->home_ns = rr_limits_get(limits, RR_LIMIT_PULSE_HOME_US, servo) * 1000;
}
