/* Bytes from the host to whole lines; see line.h. */
#include "line.h"

#include "check.h"
#include "fields.h"
#include "kept.h"
#include "names.h"
#include "seeded.h"

#define CHECK_LENGTH    5u /* a space and four hex digits */
#define LENGTH_TOO_LONG RR_SEEDED(LINE_ONE_TOO_LONG, RR_HOST_LINE_MAX + 1, RR_HOST_LINE_MAX)

static bool all_printable(const char *text, uint8_t length)
{
    for (uint8_t i = 0; i < length; i++) {
        if (text[i] < 0x20 || text[i] > 0x7E) {
            return false;
        }
    }
    return true;
}

/* Is the text a body, a space, and the body's check? */
static bool check_is_right(const char *text, uint8_t body)
{
    if (text[body] != ' ') {
        return false;
    }
    uint16_t crc = RR_CRC16_START;
    for (uint8_t i = 0; i < body; i++) {
        crc = rr_crc16(crc, (uint8_t)text[i]);
    }
    for (uint8_t i = 0; i < 4; i++) {
        if (rr_fields_hex(text[body + 1u + i]) != (int8_t)((crc >> (12 - 4 * i)) & 0xF)) {
            return false;
        }
    }
    return true;
}

/* LINE-7 */
static const RR_FLASH char bare_words[] = "stop\0who\0";

/* A whole line, its LF and a CR before it gone: what is it? */
static enum rr_line_kind judged(struct rr_line *line, uint8_t length)
{
    char *text = line->u.text;
    if (!all_printable(text, length)) {
        return RR_LINE_GARBLED;
    }
    uint8_t bare = rr_names_find(bare_words, text, length);
    if (bare != RR_NAME_UNKNOWN) {
        return bare == 0 ? RR_LINE_BARE_STOP : RR_LINE_BARE_WHO;
    }
    if (length < 2u + CHECK_LENGTH) {
        return RR_LINE_GARBLED;
    }
    uint8_t body = (uint8_t)(length - CHECK_LENGTH);
    int8_t high = rr_fields_hex(text[0]);
    int8_t low = rr_fields_hex(text[1]);
    if (!check_is_right(text, body) || high < 0 || low < 0 || (body > 2 && text[2] != ' ')) {
        return RR_LINE_GARBLED;
    }
    text[body] = '\0';
    line->body = body;
    line->tag = (uint8_t)(high << 4 | low);
    return RR_LINE_REQUEST;
}

const char *rr_line_body(const struct rr_line *line)
{
    return line->body > 2 ? line->u.text + 3 : line->u.text + 2;
}

enum rr_line_kind rr_line_take(struct rr_line *line, uint8_t byte)
{
    if (byte != '\n') {
        if (line->length < LENGTH_TOO_LONG) {
            line->u.text[line->length++] = (char)byte;
        }
        return RR_LINE_NONE;
    }
    uint8_t length = line->length;
    line->length = 0;
    if (length >= LENGTH_TOO_LONG) { /* with the LF it has more bytes than a line may have */
        rr_kept_count(&line->overlong);
        rr_kept_count(&line->garbled);
        return RR_LINE_GARBLED;
    }
    if (length > 0 && line->u.text[length - 1] == '\r') {
        length--;
    }
    if (length == 0) {
        return RR_LINE_NONE;
    }
    enum rr_line_kind kind = judged(line, length);
    if (kind == RR_LINE_GARBLED) {
        rr_kept_count(&line->garbled);
    }
    return kind;
}
