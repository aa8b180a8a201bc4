/* One line to the host; see out.h. */
#include "out.h"

#include "check.h"

static void put(struct rr_out *out, char c)
{
    if (out->copy != NULL) {
        out->copy[out->length] = c;
    }
    out->length++;
    if (!out->mute) {
        out->port->write(out->self, &c, 1);
    }
}

void rr_out_begin(struct rr_out *out, const struct rr_port *port, void *self, char *copy, uint8_t longest)
{
    out->port = port;
    out->self = self;
    out->copy = copy;
    out->length = 0;
    out->crc = RR_CRC16_START;
    out->mute = port->room(self) < longest;
}

void rr_out_char(struct rr_out *out, char c)
{
    out->crc = rr_crc16(out->crc, (uint8_t)c);
    put(out, c);
}

void rr_out_text(struct rr_out *out, const char *text)
{
    while (*text != '\0') {
        rr_out_char(out, *text++);
    }
}

void rr_out_word(struct rr_out *out, const char *word)
{
    rr_out_char(out, ' ');
    rr_out_text(out, word);
}

/* By subtracting powers of ten: on a small controller a 32-bit division a digit would fill the tick. */
static void put_decimal(struct rr_out *out, uint32_t value)
{
    static const uint32_t powers[] = {1000000000ul, 100000000ul, 10000000ul, 1000000ul, 100000ul,
                                      10000ul,      1000ul,      100ul,      10ul};
    bool begun = false;
    for (uint8_t i = 0; i < sizeof powers / sizeof powers[0]; i++) {
        char digit = '0';
        while (value >= powers[i]) {
            value -= powers[i];
            digit++;
        }
        begun = begun || digit != '0';
        if (begun) {
            rr_out_char(out, digit);
        }
    }
    rr_out_char(out, (char)('0' + value));
}

void rr_out_u32(struct rr_out *out, uint32_t value)
{
    rr_out_char(out, ' ');
    put_decimal(out, value);
}

void rr_out_i32(struct rr_out *out, int32_t value)
{
    rr_out_char(out, ' ');
    if (value < 0) {
        rr_out_char(out, '-');
    }
    put_decimal(out, value < 0 ? 0ul - (uint32_t)value : (uint32_t)value);
}

static char hex_digit(uint8_t value)
{
    return (char)(value < 10 ? '0' + value : 'a' + value - 10);
}

void rr_out_hex2(struct rr_out *out, uint8_t value)
{
    rr_out_char(out, hex_digit(value >> 4));
    rr_out_char(out, hex_digit(value & 0xF));
}

uint8_t rr_out_end(struct rr_out *out)
{
    uint16_t crc = out->crc;
    put(out, ' ');
    for (int8_t shift = 12; shift >= 0; shift = (int8_t)(shift - 4)) {
        put(out, hex_digit((uint8_t)(crc >> shift & 0xF)));
    }
    put(out, '\n');
    return out->length;
}
