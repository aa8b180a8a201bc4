/* Packed data lines read back into samples, for the host's end: the quick twin of `ramprig_link.samples.decode`.
 *
 * It takes lines or not, and never says why not: what it does not take is read again by `ramprig_link`, which has the
 * words for it. So the two must agree on every line (tests/test_session_dataline.py). No memory, no state of its own. */
#include "../../core/check.h"
#include "../../core/words.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#define HEAD_LENGTH    4u  /* `D`, two hex digits, a space */
#define CHECK_LENGTH   5u  /* a space, four hex digits */
#define HEADER_BITS    76u /* tick 32, period 16, mask 20, count 8 */
#define K_BITS         4u
#define ESCAPED_BITS   32u
#define CHARACTER_BITS 6u
#define SUM_CAP        ((uint32_t)RR_RICE_SUM_CAP)
#define CHANNELS_MAX   (3u * RR_AXES_MAX + RR_SERVOS_MAX + 3u)

/* The first sample and one of residuals may reach beyond the payload's end before that is seen; zeros stand there. */
#define BEYOND_BITS (CHANNELS_MAX * (32u + K_BITS + RR_RICE_QUOTIENT_MAX + ESCAPED_BITS) + 64u)
#define BYTES_MAX   ((RR_PAYLOAD_MAX * CHARACTER_BITS + BEYOND_BITS) / 8u + 1u)

#define NUMBERS  256u  /* lines are numbered modulo this */
#define ROWS_MAX 1024u /* most samples of lines that are read together */

/* What lines say that follow each other. `values` has a row of ROWS_MAX places for each channel, in order of their bits,
 * of which the first `rows` are filled. */
struct datalines {
    uint32_t first_number;
    uint32_t last_number;
    uint32_t first_tick;
    uint32_t period;
    uint32_t mask;
    uint32_t rows;
    uint32_t channels;
    int32_t values[CHANNELS_MAX][ROWS_MAX];
};

/* The head of one line. */
struct head {
    uint32_t number;
    uint32_t first_tick;
    uint32_t period;
    uint32_t mask;
    uint32_t rows;
};

struct track {
    int32_t *column;
    int32_t last;
    int32_t slope; /* stays 0 where the difference is of order 1 */
    uint32_t total;
    uint8_t k;
    bool bent;
};

struct bits {
    uint8_t bytes[BYTES_MAX];
    uint32_t at;
    uint32_t end; /* of the payload */
};

/* ---- the line ---- */

static int hex_value(uint8_t c)
{
    if (c >= '0' && c <= '9') {
        return c - '0';
    }
    return c >= 'a' && c <= 'f' ? c - 'a' + 10 : -1;
}

/* The value of `count` lower-case hex digits, -1 where one is not. */
static int32_t hex_number(const uint8_t *text, uint32_t count)
{
    int32_t number = 0;
    for (uint32_t i = 0; i < count; i++) {
        int digit = hex_value(text[i]);
        if (digit < 0) {
            return -1;
        }
        number = number * 16 + digit;
    }
    return number;
}

static bool is_checked(const uint8_t *line, uint32_t body)
{
    uint16_t crc = RR_CRC16_START;
    for (uint32_t i = 0; i < body; i++) {
        crc = rr_crc16(crc, line[i]);
    }
    return line[body] == ' ' && hex_number(line + body + 1, CHECK_LENGTH - 1u) == crc;
}

/* The alphabet of RFC 4648 section 4; -1 for any other character. */
static int sextet_value(uint8_t c)
{
    if (c >= 'A' && c <= 'Z') {
        return c - 'A';
    }
    if (c >= 'a' && c <= 'z') {
        return c - 'a' + 26;
    }
    if (c >= '0' && c <= '9') {
        return c - '0' + 52;
    }
    return c == '+' ? 62 : c == '/' ? 63 : -1;
}

static bool unpack(struct bits *bits, const uint8_t *payload, uint32_t length)
{
    uint32_t held = 0;
    uint32_t count = 0;
    uint8_t *out = bits->bytes;
    for (uint32_t i = 0; i < length; i++) {
        int value = sextet_value(payload[i]);
        if (value < 0) {
            return false;
        }
        held = held << CHARACTER_BITS | (uint32_t)value;
        count += CHARACTER_BITS;
        if (count >= 8u) {
            count -= 8u;
            *out++ = (uint8_t)(held >> count);
        }
    }
    *out++ = (uint8_t)(held << (8u - count));
    memset(out, 0, (size_t)(bits->bytes + BYTES_MAX - out));
    bits->at = 0;
    bits->end = length * CHARACTER_BITS;
    return true;
}

/* ---- the bits ---- */

/* The next `count` bits, 0 to 32, most significant first. */
static uint32_t take(struct bits *bits, uint32_t count)
{
    const uint8_t *byte = bits->bytes + (bits->at >> 3);
    uint64_t window = 0;
    for (uint32_t i = 0; i < 5u; i++) {
        window = window << 8 | byte[i];
    }
    uint32_t after = 40u - (bits->at & 7u) - count;
    bits->at += count;
    return (uint32_t)(window >> after & (((uint64_t)1 << count) - 1u));
}

/* How many one bits come before the next zero, at most RICE_QUOTIENT_MAX, which are then taken; the zero too. */
static uint32_t take_ones(struct bits *bits)
{
    uint32_t ones = 0;
    while (ones < RR_RICE_QUOTIENT_MAX && take(bits, 1) != 0) {
        ones++;
    }
    return ones;
}

static int32_t as_signed(uint32_t value)
{
    return value > INT32_MAX ? (int32_t)(value - 0x80000000u) + INT32_MIN : (int32_t)value;
}

/* ---- the channels ---- */

struct shape {
    uint8_t first;
    uint8_t step;
    uint8_t fitted;
    uint8_t width;
    uint8_t order;
};

#define FITTED_AXIS   RR_AXES_MAX
#define FITTED_SERVO  RR_SERVOS_MAX
#define FITTED_DEVICE 1
#define SHAPE(NAME, per, first, step, width, order) {first, step, FITTED_##per, width, order},
static const struct shape shapes[] = {RR_CHANNEL_LIST(SHAPE)};
#undef SHAPE

/* The shape of the channel with this bit of the mask, NULL where there is none. */
static const struct shape *shape_of(uint32_t bit)
{
    for (uint32_t i = 0; i < sizeof shapes / sizeof shapes[0]; i++) {
        const struct shape *shape = &shapes[i];
        for (uint32_t index = 0; index < shape->fitted; index++) {
            if (bit == shape->first + index * shape->step) {
                return shape;
            }
        }
    }
    return NULL;
}

/* The first sample, in full, and what the others are told from; false for a mask that no block can have. */
static bool read_first(struct bits *bits, const struct head *head, struct datalines *lines, struct track *tracks)
{
    lines->channels = 0;
    for (uint32_t bit = 0; head->mask >> bit != 0; bit++) {
        if ((head->mask >> bit & 1u) == 0) {
            continue;
        }
        const struct shape *shape = shape_of(bit);
        if (shape == NULL) {
            return false;
        }
        struct track *track = &tracks[lines->channels];
        uint32_t spare = 32u - shape->width;
        uint32_t raw = take(bits, shape->width) << spare;
        track->last = as_signed(raw) / (int32_t)((uint32_t)1 << spare); /* exact: the spare bits are 0 */
        track->slope = 0;
        track->bent = shape->order == 2;
        track->k = head->rows > 1 ? (uint8_t)take(bits, K_BITS) : 0;
        track->total = (uint32_t)1 << track->k;
        track->column = lines->values[lines->channels] + lines->rows;
        track->column[0] = track->last;
        lines->channels++;
    }
    return lines->channels != 0;
}

/* ---- the residuals ---- */

/* k of DATA-7. */
static uint8_t parameter_of(uint32_t count, uint32_t total)
{
    uint8_t k = 0;
    for (uint32_t reach = count; k < RR_RICE_K_MAX && reach < total; reach <<= 1) {
        k++;
    }
    return k;
}

static void read_value(struct bits *bits, struct track *track, uint32_t row, uint32_t count, bool halve)
{
    uint32_t ones = take_ones(bits);
    uint32_t u = ones < RR_RICE_QUOTIENT_MAX ? (ones << track->k) + take(bits, track->k) : take(bits, ESCAPED_BITS);
    uint32_t residual = (u & 1u) != 0 ? ~(u >> 1) : u >> 1;
    uint32_t rise = (uint32_t)track->slope + residual;
    track->last = as_signed((uint32_t)track->last + rise);
    track->column[row] = track->last;
    track->slope = track->bent ? as_signed(rise) : 0;
    track->total = (halve ? track->total >> 1 : track->total) + (u < SUM_CAP ? u : SUM_CAP);
    track->k = parameter_of(count, track->total);
}

/* False where the bits end within a sample, or more is left than a character's rest of zeros. */
static bool read_others(struct bits *bits, uint32_t rows, uint32_t channels, struct track *tracks)
{
    uint32_t count = 1;
    for (uint32_t row = 1; row < rows; row++) {
        bool halve = count == RR_RICE_RESET;
        count = halve ? count / 2u + 1u : count + 1u;
        for (uint32_t i = 0; i < channels; i++) {
            read_value(bits, &tracks[i], row, count, halve);
        }
        if (bits->at > bits->end) {
            return false;
        }
    }
    if (bits->at > bits->end || bits->end - bits->at >= CHARACTER_BITS) {
        return false;
    }
    return take(bits, bits->end - bits->at) == 0;
}

/* ---- the lines ---- */

/* Whether a line with this head goes on where those before have ended, so that their samples are one block. */
static bool goes_on(const struct datalines *lines, const struct head *head)
{
    return lines->rows == 0 ||
           (head->number == (lines->last_number + 1u) % NUMBERS && head->period == lines->period &&
            head->mask == lines->mask && head->first_tick == lines->first_tick + lines->rows * lines->period);
}

/* Adds the samples of one line, given without its LF; false, with nothing added, where it is not to be taken. */
static bool add_line(const uint8_t *text, uint32_t length, struct datalines *lines)
{
    struct bits bits;
    struct track tracks[CHANNELS_MAX];
    struct head head;
    if (length < HEAD_LENGTH + CHECK_LENGTH || length > HEAD_LENGTH + RR_PAYLOAD_MAX + CHECK_LENGTH) {
        return false;
    }
    uint32_t payload = length - HEAD_LENGTH - CHECK_LENGTH;
    int32_t number = hex_number(text + 1, 2);
    if (text[0] != 'D' || number < 0 || text[3] != ' ' || payload * CHARACTER_BITS < HEADER_BITS ||
        !is_checked(text, length - CHECK_LENGTH) || !unpack(&bits, text + HEAD_LENGTH, payload)) {
        return false;
    }
    head.number = (uint32_t)number;
    head.first_tick = take(&bits, 32);
    head.period = take(&bits, 16);
    head.mask = take(&bits, 20);
    head.rows = take(&bits, 8);
    if (head.period == 0 || head.rows == 0 || head.rows > ROWS_MAX - lines->rows || !goes_on(lines, &head) ||
        !read_first(&bits, &head, lines, tracks) || !read_others(&bits, head.rows, lines->channels, tracks)) {
        return false;
    }
    if (lines->rows == 0) {
        lines->first_number = head.number;
        lines->first_tick = head.first_tick;
        lines->period = head.period;
        lines->mask = head.mask;
    }
    lines->last_number = head.number;
    lines->rows += head.rows;
    return true;
}

/* Reads right packed data lines, each ended by LF, from `begin` on in `text`, as long as they follow each other without a
 * gap and there is room. Returns where they end, `begin` where the first line is none; the samples are in `*lines`. */
uint32_t datalines_read(const uint8_t *text, uint32_t length, uint32_t begin, struct datalines *lines)
{
    lines->rows = 0;
    while (begin < length) {
        const uint8_t *end = memchr(text + begin, '\n', length - begin);
        if (end == NULL || !add_line(text + begin, (uint32_t)(end - text) - begin, lines)) {
            break;
        }
        begin = (uint32_t)(end - text) + 1u;
    }
    return begin;
}
