/* A packed block of samples; see block.h. */
#include "block.h"

#define COUNT_BIT 68u /* where the header's number of samples begins: 32 + 16 + 20 */
#define HEADER_BITS 76u

struct shape {
    uint8_t per;
    uint8_t first_bit;
    uint8_t step;
    uint8_t width;
    uint8_t order;
};

#define SHAPE(NAME, per, first, step, width, order) {RR_PER_##per, first, step, width, order},
static const struct shape shapes[] = {RR_CHANNEL_LIST(SHAPE)};
#undef SHAPE

static const struct shape *shape_of(uint8_t bit)
{
    for (uint8_t i = 0; i < sizeof shapes / sizeof shapes[0]; i++) {
        const struct shape *shape = &shapes[i];
        uint8_t fitted = shape->per == RR_PER_AXIS ? RR_AXES_MAX : shape->per == RR_PER_SERVO ? RR_SERVOS_MAX : 1;
        for (uint8_t index = 0; index < fitted; index++) {
            if (bit == shape->first_bit + index * shape->step) {
                return shape;
            }
        }
    }
    return &shapes[0];
}

int32_t rr_block_held(uint8_t bit, int32_t value)
{
    uint8_t width = shape_of(bit)->width;
    if (width == 32) {
        return value;
    }
    int32_t end = (int32_t)1 << (width - 1);
    if (value >= end) {
        return end - 1;
    }
    return value < -end ? -end : value;
}

/* Appends the low `count` bits of `value`, most significant first. */
static void put_bits(struct rr_block *block, uint32_t value, uint8_t count)
{
    while (count > 0) {
        uint8_t used = (uint8_t)(block->bits % 6u);
        uint8_t room = (uint8_t)(6u - used);
        uint8_t take = count < room ? count : room;
        uint8_t part = (uint8_t)((value >> (count - take)) & ((1u << take) - 1u));
        char *sextet = &block->payload[block->bits / 6u];
        if (used == 0) {
            *sextet = 0;
        }
        *sextet = (char)(*sextet | (char)(part << (room - take)));
        block->bits = (uint16_t)(block->bits + take);
        count = (uint8_t)(count - take);
    }
}

/* k of DATA-7: the least with N 2^k >= A, at most RICE_K_MAX. */
static uint8_t parameter_of(const struct rr_channel *channel)
{
    uint8_t k = 0;
    while (k < RR_RICE_K_MAX && ((uint32_t)channel->count << k) < channel->sum) {
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

static uint32_t residual_of(const struct rr_channel *channel, int32_t value)
{
    int32_t first = difference(value, channel->value);
    return folded(shape_of(channel->bit)->order == 2 ? difference(first, channel->difference) : first);
}

static uint8_t code_length(uint32_t u, uint8_t k)
{
    uint32_t quotient = u >> k;
    return quotient < RR_RICE_QUOTIENT_MAX ? (uint8_t)(quotient + 1u + k) : (uint8_t)(RR_RICE_QUOTIENT_MAX + 32u);
}

static void put_code(struct rr_block *block, uint32_t u, uint8_t k)
{
    uint32_t quotient = u >> k;
    if (quotient >= RR_RICE_QUOTIENT_MAX) {
        put_bits(block, 0xFFFFu, RR_RICE_QUOTIENT_MAX);
        put_bits(block, u, 32);
        return;
    }
    put_bits(block, ((uint32_t)1 << (quotient + 1u)) - 2u, (uint8_t)(quotient + 1u));
    put_bits(block, u, k);
}

static void learn(struct rr_channel *channel, uint32_t u)
{
    if (channel->count == RR_RICE_RESET) {
        channel->sum >>= 1;
        channel->count >>= 1;
    }
    channel->sum += u < RR_RICE_SUM_CAP ? u : RR_RICE_SUM_CAP;
    channel->count++;
}

void rr_block_prepare(struct rr_block *block, uint32_t mask, uint16_t period, char *payload, uint8_t capacity)
{
    block->payload = payload;
    block->capacity = capacity;
    block->mask = mask;
    block->period = period;
    block->samples = 0;
    block->channels = 0;
    for (uint8_t bit = 0; bit < 20; bit++) {
        if ((mask >> bit & 1u) != 0 && block->channels < RR_CHANNELS) {
            block->channel[block->channels].bit = bit;
            block->channel[block->channels].start_k = RR_RICE_K_START;
            block->channels++;
        }
    }
}

/* Header and first sample; the k of each channel only where more samples follow (DATA-4). */
static void put_first(struct rr_block *block, bool with_k)
{
    block->bits = 0;
    put_bits(block, block->first_tick, 32);
    put_bits(block, block->period, 16);
    put_bits(block, block->mask, 20);
    put_bits(block, 0, 8);
    for (uint8_t i = 0; i < block->channels; i++) {
        struct rr_channel *channel = &block->channel[i];
        put_bits(block, (uint32_t)channel->value, shape_of(channel->bit)->width);
        if (with_k) {
            put_bits(block, channel->start_k, 4);
        }
    }
}

static void open_block(struct rr_block *block, uint32_t tick, const int32_t *values)
{
    block->first_tick = tick;
    for (uint8_t i = 0; i < block->channels; i++) {
        struct rr_channel *channel = &block->channel[i];
        channel->value = rr_block_held(channel->bit, values[i]);
        channel->difference = 0;
        channel->sum = (uint32_t)1 << channel->start_k;
        channel->count = 1;
    }
    put_first(block, true);
    block->samples = 1;
}

bool rr_block_add(struct rr_block *block, uint32_t tick, const int32_t *values)
{
    if (block->samples == 0) {
        open_block(block, tick, values);
        return true;
    }
    uint16_t needed = block->bits;
    for (uint8_t i = 0; i < block->channels; i++) {
        const struct rr_channel *channel = &block->channel[i];
        int32_t value = rr_block_held(channel->bit, values[i]);
        needed = (uint16_t)(needed + code_length(residual_of(channel, value), parameter_of(channel)));
    }
    if (block->samples == RR_BLOCK_SAMPLES_MAX || needed > 6u * block->capacity) {
        return false;
    }
    for (uint8_t i = 0; i < block->channels; i++) {
        struct rr_channel *channel = &block->channel[i];
        int32_t value = rr_block_held(channel->bit, values[i]);
        uint32_t u = residual_of(channel, value);
        put_code(block, u, parameter_of(channel));
        learn(channel, u);
        channel->difference = difference(value, channel->value);
        channel->value = value;
    }
    block->samples++;
    return true;
}

static char character_of(uint8_t sextet)
{
    if (sextet < 26) {
        return (char)('A' + sextet);
    }
    if (sextet < 52) {
        return (char)('a' + sextet - 26);
    }
    if (sextet < 62) {
        return (char)('0' + sextet - 52);
    }
    return sextet == 62 ? '+' : '/';
}

uint8_t rr_block_close(struct rr_block *block)
{
    if (block->samples == 1) {
        put_first(block, false);
    }
    char *high = &block->payload[COUNT_BIT / 6u]; /* bits 66 to 71: two of the mask, four of the count */
    high[0] = (char)(high[0] | (char)(block->samples >> 4));
    high[1] = (char)(high[1] | (char)((block->samples & 0xF) << 2));
    uint8_t length = (uint8_t)((block->bits + 5u) / 6u);
    for (uint8_t i = 0; i < length; i++) {
        block->payload[i] = character_of((uint8_t)block->payload[i]);
    }
    for (uint8_t i = 0; i < block->channels; i++) {
        block->channel[i].start_k = parameter_of(&block->channel[i]);
    }
    block->samples = 0;
    return length;
}

_Static_assert(COUNT_BIT % 6u == 2u && HEADER_BITS == COUNT_BIT + 8u, "rr_block_close patches the count by sextets");
