/* One line to the host; see voice.h. */
#include "voice.h"

#include "check.h"

enum form { NOTHING, WORD, NUMBER, HEX2, BITS };

#define TAIL_LENGTH 6u /* a space, four hex digits, LF */

/* By subtracting powers of ten: on a small controller a 32-bit division a digit would fill the tick. */
static const RR_FLASH uint32_t powers[] = {1000000000ul, 100000000ul, 10000000ul, 1000000ul, 100000ul,
                                           10000ul,      1000ul,      100ul,      10ul};
#define POWERS (sizeof powers / sizeof powers[0])

static char hex_digit(uint8_t value)
{
    return (char)(value < 10 ? '0' + value : 'a' + value - 10);
}

/* The base64 alphabet of RFC 4648 section 4. */
static char sextet_character(uint8_t sextet)
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

/* Character `place` of a payload: its six bits lie in one byte or in two. */
static char payload_character(const uint8_t *bits, uint8_t place)
{
    uint16_t first = (uint16_t)(6u * place);
    const uint8_t *byte = bits + (first >> 3);
    uint16_t two = (uint16_t)((uint16_t)(byte[0] << 8) | byte[1]);
    return sextet_character((uint8_t)(two >> (10u - (first & 7u))) & 0x3Fu);
}

/* The number's digit at a power of ten, which is taken off it. */
static char digit_at(struct rr_voice *voice, uint8_t power)
{
    uint32_t value = voice->number;
    uint32_t step = powers[power];
    char digit = '0';
    while (value >= step) {
        value -= step;
        digit++;
    }
    voice->number = value;
    return digit;
}

static char next_digit(struct rr_voice *voice)
{
    if (voice->place < POWERS) {
        return digit_at(voice, voice->place++);
    }
    voice->form = NOTHING;
    return (char)('0' + voice->number);
}

static char next_of_field(struct rr_voice *voice)
{
    switch (voice->form) {
    case WORD: {
        char c = *voice->word++;
        if (c == '\0') {
            voice->form = NOTHING;
        }
        return c;
    }
    case NUMBER:
        return next_digit(voice);
    case HEX2:
        if (voice->place++ == 0) {
            return hex_digit((uint8_t)voice->number >> 4);
        }
        voice->form = NOTHING;
        return hex_digit((uint8_t)voice->number & 0xF);
    case BITS:
        if (voice->place == voice->length) {
            voice->form = NOTHING;
            return '\0';
        }
        return payload_character(voice->bits, voice->place++);
    default:
        return '\0';
    }
}

void rr_voice_begin(struct rr_voice *voice)
{
    voice->crc = RR_CRC16_START;
    voice->form = NOTHING;
    voice->lead = 0;
    voice->minus = false;
    voice->tail = 0;
    voice->field = 0;
}

char rr_voice_next(struct rr_voice *voice)
{
    char c;
    if (voice->lead != 0) {
        c = (char)voice->lead;
        voice->lead = voice->minus ? '-' : 0;
        voice->minus = false;
    } else {
        c = next_of_field(voice);
    }
    if (c != '\0') {
        voice->crc = rr_crc16(voice->crc, (uint8_t)c);
    }
    return c;
}

void rr_voice_end(struct rr_voice *voice)
{
    voice->tail = TAIL_LENGTH;
}

char rr_voice_tail(struct rr_voice *voice)
{
    uint8_t left = voice->tail--;
    if (left == TAIL_LENGTH) {
        return ' ';
    }
    if (left == 1) {
        return '\n';
    }
    char digit = hex_digit((uint8_t)(voice->crc >> 12));
    voice->crc = (uint16_t)(voice->crc << 4);
    return digit;
}

RR_APART static void begin_field(struct rr_voice *voice, uint8_t form, char lead)
{
    voice->form = form;
    voice->lead = (uint8_t)lead;
    voice->place = 0;
}

RR_APART void rr_voice_hex2(struct rr_voice *voice, char lead, uint8_t value)
{
    begin_field(voice, HEX2, lead);
    voice->number = value;
}

void rr_voice_word(struct rr_voice *voice, const RR_FLASH char *word)
{
    begin_field(voice, WORD, ' ');
    voice->word = word;
}

void rr_voice_u32(struct rr_voice *voice, uint32_t value)
{
    begin_field(voice, NUMBER, ' ');
    voice->number = value;
    while (voice->place < POWERS && value < powers[voice->place]) {
        voice->place++;
    }
}

void rr_voice_i32(struct rr_voice *voice, int32_t value)
{
    rr_voice_u32(voice, value < 0 ? 0ul - (uint32_t)value : (uint32_t)value);
    voice->minus = value < 0;
}

RR_APART void rr_voice_bits(struct rr_voice *voice, const uint8_t *bits, uint8_t length)
{
    begin_field(voice, BITS, ' ');
    voice->bits = bits;
    voice->length = length;
}
