/* A packed block of samples; see block.h. */
#include "block.h"

#define COUNT_BIT 68u /* where the header's number of samples begins: 32 + 16 + 20 */

struct shape {
    int32_t end; /* 2^(width - 1), or 0 for the full 32 bits */
    uint8_t width;
    uint8_t order;
};

#define END(width) ((int32_t)((width) < 32 ? (uint32_t)1 << ((width) - 1) : 0ul))
#define SHAPE(NAME, per, first, step, width, order) {END(width), width, order},
static const RR_FLASH struct shape shapes[] = {RR_CHANNEL_LIST(SHAPE)};
#undef SHAPE

/* `shape_of` knows the channels' order and bits. */
_Static_assert(RR_CHANNEL_DUTY == 0 && RR_CHANNEL_COUNTS == 1 && RR_CHANNEL_CURRENT_MA == 2, "three to an axis, from bit 0");
_Static_assert(RR_CHANNEL_PULSE_US == 12 && RR_CHANNEL_SUPPLY_MV == 16 && RR_CHANNEL_TEMPERATURE_DC == 17, "after the axes");
_Static_assert(RR_CHANNEL_STATE == 18 && sizeof shapes / sizeof shapes[0] == 7, "the last");

static const RR_FLASH struct shape *shape_of(uint8_t bit)
{
    if (bit >= RR_CHANNEL_SUPPLY_MV) {
        return &shapes[bit - RR_CHANNEL_SUPPLY_MV + 4];
    }
    if (bit >= RR_CHANNEL_PULSE_US) {
        return &shapes[3];
    }
    while (bit >= RR_AXIS_CHANNELS) {
        bit = (uint8_t)(bit - RR_AXIS_CHANNELS);
    }
    return &shapes[bit];
}

int32_t rr_block_held(uint8_t bit, int32_t value)
{
    int32_t end = shape_of(bit)->end;
    if (end == 0) {
        return value;
    }
    if (value >= end) {
        return end - 1;
    }
    return value < -end ? -end : value;
}

/* Appends the low `count` bits of `value`, at most 16, most significant first. */
static void put_bits(struct rr_block *block, uint16_t value, uint8_t count)
{
    uint8_t used = (uint8_t)(block->bits & 7u);
    uint8_t *byte = &block->bytes[block->bits >> 3];
    block->bits = (uint16_t)(block->bits + count);
    while (count > 0) {
        if (used == 0) {
            *byte = 0;
        }
        uint8_t room = (uint8_t)(8u - used);
        value = (uint16_t)(value & (uint16_t)((1ul << count) - 1u));
        if (count < room) {
            *byte = (uint8_t)(*byte | (uint8_t)(value << (room - count)));
            return;
        }
        count = (uint8_t)(count - room);
        *byte = (uint8_t)(*byte | (uint8_t)(value >> count));
        byte++;
        used = 0;
    }
}

static void put_wide(struct rr_block *block, uint32_t value, uint8_t count)
{
    if (count > 16) {
        put_bits(block, (uint16_t)(value >> 16), (uint8_t)(count - 16u));
        count = 16;
    }
    put_bits(block, (uint16_t)value, count);
}

/* k of DATA-7: the least with N 2^k >= A, at most RICE_K_MAX. */
RR_APART static uint8_t parameter_of(uint8_t count, RR_U24 sum)
{
    uint8_t k = 0;
    for (RR_U24 reach = count; k < RR_RICE_K_MAX && reach < sum; reach <<= 1) {
        k++;
    }
    return k;
}

static int32_t difference(int32_t a, int32_t b)
{
    return (int32_t)((uint32_t)a - (uint32_t)b);
}

static uint32_t folded(int32_t residual)
{
    return residual < 0 ? ~((uint32_t)residual << 1) : (uint32_t)residual << 1;
}

/* How a folded residual is coded: `ones` one bits and a zero, then k bits; or the escape. */
struct code {
    uint8_t k;
    uint8_t ones; /* RICE_QUOTIENT_MAX = the escape */
};

static struct code code_of(uint32_t u, uint8_t k)
{
    uint32_t quotient = u >> k;
    return (struct code){k, quotient < RR_RICE_QUOTIENT_MAX ? (uint8_t)quotient : (uint8_t)RR_RICE_QUOTIENT_MAX};
}

static uint8_t length_of(struct code code)
{
    return code.ones == RR_RICE_QUOTIENT_MAX ? (uint8_t)(RR_RICE_QUOTIENT_MAX + 32u) : (uint8_t)(code.ones + 1u + code.k);
}

static void put_code(struct rr_block *block, uint32_t u, struct code code)
{
    if (code.ones == RR_RICE_QUOTIENT_MAX) {
        put_bits(block, 0xFFFFu, RR_RICE_QUOTIENT_MAX);
        put_wide(block, u, 32);
        return;
    }
    put_bits(block, (uint16_t)((2ul << code.ones) - 2u), (uint8_t)(code.ones + 1u));
    put_bits(block, (uint16_t)u, code.k);
}
_Static_assert(RR_RICE_K_MAX < 16 && RR_RICE_QUOTIENT_MAX == 16, "put_bits takes 16 at most");

RR_APART void rr_block_prepare(struct rr_block *block, uint32_t mask, uint16_t period, struct rr_channel *channel)
{
    block->channel = channel;
    block->mask = mask;
    block->period = period;
    block->samples = 0;
    block->channels = 0;
    for (uint8_t bit = 0; mask != 0; mask >>= 1) {
        if ((mask & 1u) != 0) {
            channel->bit = bit;
            channel->sum = (RR_U24)1 << RR_RICE_K_START;
            channel++;
            block->channels++;
        }
        bit++;
    }
}

void rr_block_place(struct rr_block *block, uint8_t *bytes, uint8_t characters)
{
    block->bytes = bytes;
    block->room = (uint16_t)(6u * characters);
}

/* Header and first sample; the k of each channel only where more samples follow (DATA-4). */
static void put_first(struct rr_block *block, bool with_k)
{
    block->bits = 0;
    put_wide(block, block->first_tick, 32);
    put_wide(block, block->period, 16);
    put_wide(block, block->mask, 20);
    put_bits(block, 0, 8);
    const struct rr_channel *channel = block->channel;
    for (uint8_t left = block->channels; left != 0; left--, channel++) {
        put_wide(block, (uint32_t)channel->value, shape_of(channel->bit)->width);
        if (with_k) {
            put_bits(block, parameter_of(1, channel->sum), 4); /* before its first residual A is 2^k */
        }
    }
}

static void open_block(struct rr_block *block, uint32_t tick, const int32_t *values)
{
    block->first_tick = tick;
    block->count = 1;
    struct rr_channel *channel = block->channel;
    for (uint8_t left = block->channels; left != 0; left--, channel++) {
        channel->value = rr_block_held(channel->bit, *values++);
    }
    for (uint8_t i = 0; i < RR_SECOND_ORDER; i++) {
        block->difference[i] = 0;
    }
    put_first(block, true);
    block->samples = 1;
}

/* Makes the folded residuals of the values, and returns the bits their codes take. What a channel then holds of the
 * sample is right only if the sample is taken: one that opens the next block sets it anew. */
static uint16_t fold(struct rr_block *block, const int32_t *values, uint32_t *residuals, struct code *codes)
{
    uint16_t needed = 0;
    uint8_t second = 0;
    for (uint8_t i = 0; i < block->channels; i++) {
        struct rr_channel *channel = &block->channel[i];
        int32_t value = rr_block_held(channel->bit, values[i]);
        int32_t residual = difference(value, channel->value);
        channel->value = value;
        if (shape_of(channel->bit)->order == 2) {
            int32_t before = block->difference[second];
            block->difference[second++] = residual;
            residual = difference(residual, before);
        }
        uint32_t u = folded(residual);
        residuals[i] = u;
        codes[i] = code_of(u, parameter_of(block->count, channel->sum));
        needed = (uint16_t)(needed + length_of(codes[i]));
    }
    return needed;
}

/* Out of the way of what each sample needs: inlined, it costs a slow controller 8 us a tick. */
#ifdef __GNUC__
#define RARELY __attribute__((noinline, cold))
#else
#define RARELY
#endif

/* Undoes `fold` for a block of one sample, whose values are written once more when it is closed without a second. */
RARELY static void take_back(struct rr_block *block, const uint32_t *residuals)
{
    struct rr_channel *channel = block->channel;
    for (uint8_t i = block->channels; i != 0; i--, channel++) {
        uint32_t u = *residuals++;
        uint32_t residual = u >> 1;
        channel->value = (int32_t)((uint32_t)channel->value - ((u & 1u) != 0 ? ~residual : residual));
    }
}

/* Writes the codes and lets the running means learn from them (DATA-7). */
static void put_sample(struct rr_block *block, const uint32_t *residuals, const struct code *codes)
{
    bool halve = block->count == RR_RICE_RESET;
    struct rr_channel *channel = block->channel;
    for (uint8_t left = block->channels; left != 0; left--, channel++) {
        uint32_t u = *residuals++;
        put_code(block, u, *codes++);
        if (halve) {
            channel->sum >>= 1;
        }
        channel->sum = (RR_U24)(channel->sum + (u < RR_RICE_SUM_CAP ? u : RR_RICE_SUM_CAP));
    }
    block->count = (uint8_t)((halve ? RR_RICE_RESET / 2 : block->count) + 1u);
    block->samples++;
}

bool rr_block_add(struct rr_block *block, uint32_t tick, const int32_t *values)
{
    if (block->samples == 0) {
        open_block(block, tick, values);
        return true;
    }
    uint32_t residuals[RR_CHANNELS];
    struct code codes[RR_CHANNELS];
    if (block->samples != RR_BLOCK_SAMPLES_MAX &&
        fold(block, values, residuals, codes) <= (uint16_t)(block->room - block->bits)) {
        put_sample(block, residuals, codes);
        return true;
    }
    if (block->samples == 1) {
        take_back(block, residuals);
    }
    return false;
}

uint8_t rr_block_close(struct rr_block *block)
{
    struct rr_channel *channel = block->channel;
    for (uint8_t left = block->channels; left != 0; left--, channel++) {
        uint8_t k = parameter_of(block->samples == 0 ? 1 : block->count, channel->sum);
        channel->sum = (RR_U24)1 << k; /* as the header of the next block will say */
    }
    if (block->samples == 1) {
        put_first(block, false);
    }
    block->bytes[(block->bits + 7u) >> 3] = 0; /* where the last character's unused bits may lie */
    uint8_t *high = &block->bytes[COUNT_BIT / 8u]; /* four bits of the mask, four of the count */
    high[0] = (uint8_t)(high[0] | block->samples >> 4);
    high[1] = (uint8_t)(high[1] | block->samples << 4);
    block->samples = 0;
    uint8_t characters = 0;
    for (uint16_t bits = 0; bits < block->bits; bits = (uint16_t)(bits + 6u)) {
        characters++;
    }
    return characters;
}

_Static_assert(COUNT_BIT % 8u == 4u, "rr_block_close patches the count by half bytes");
