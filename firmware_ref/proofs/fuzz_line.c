/* Fuzz target: any bytes into the line parser and the reader of fields (SPEC BAD-1 to BAD-3, FIELD-1).
 *
 * Every line is judged a second time by the witness's own reading of the bytes; what was read as numbers must be spelt as
 * it was given. For libFuzzer; see scripts/dev/fuzz.py. */
#include "../core/fields.h"
#include "../core/line.h"
#include "witness.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define HELD_MAX 128u

static const char *const kinds[RR_WORD_COUNT] = {
#define KINDS(NAME, word, kinds, states) kinds,
    RR_WORD_LIST(KINDS)
#undef KINDS
};

static void demand(bool right, const char *what)
{
    if (!right) {
        fprintf(stderr, "broken: %s\n", what);
        abort();
    }
}

/* FIELD-1: there is one spelling of each number. */
static void check_spelling(uint8_t word, const char *rest, const struct rr_arguments *given)
{
    for (uint8_t i = 0; i < given->count; i++) {
        char spelt[16];
        char kind = kinds[word][i];
        if (kind == 'h') {
            snprintf(spelt, sizeof spelt, " %08x", given->value[i]);
        } else if (kind == 'i') {
            snprintf(spelt, sizeof spelt, " %d", (int32_t)given->value[i]);
        } else {
            snprintf(spelt, sizeof spelt, " %u", given->value[i]);
        }
        size_t length = 1u + strcspn(rest + 1, " ");
        bool is_number = kind != 'R' && kind != 'F' && kind != 'L';
        demand(!is_number || (strlen(spelt) == length && memcmp(spelt, rest, length) == 0), "FIELD-1");
        rest += length;
    }
    demand(*rest == '\0', "BAD-5: something is left over");
}

static void check_request(const struct rr_line *line, const char *body)
{
    const char *rest;
    struct rr_arguments given;
    char tag[3];
    snprintf(tag, sizeof tag, "%02x", line->tag);
    demand(memcmp(tag, body, 2) == 0, "KIND-1: the tag");
    demand(strcmp(rr_line_body(line), body[2] == ' ' ? body + 3 : body + 2) == 0, "LINE-2: the body");
    uint8_t word = rr_fields_word(rr_line_body(line), &rest);
    if (word != RR_WORD_COUNT && rr_fields_arguments(word, rest, &given)) {
        check_spelling(word, rest, &given);
    }
}

/* What the line must be, by its bytes. */
static enum rr_line_kind expected(const uint8_t *bytes, size_t length, char *body)
{
    size_t text = length - 1u;
    if (length <= RR_HOST_LINE_MAX && text > 0 && bytes[text - 1] == '\r') {
        text--;
    }
    if (length <= RR_HOST_LINE_MAX && text == 0) {
        return RR_LINE_NONE;
    }
    if (length <= RR_HOST_LINE_MAX && text == 4 && memcmp(bytes, "stop", 4) == 0) {
        return RR_LINE_BARE_STOP;
    }
    if (length <= RR_HOST_LINE_MAX && text == 3 && memcmp(bytes, "who", 3) == 0) {
        return RR_LINE_BARE_WHO;
    }
    return witness_request(bytes, length, body) ? RR_LINE_REQUEST : RR_LINE_GARBLED;
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    struct rr_line line;
    uint8_t held[HELD_MAX];
    size_t count = 0;
    uint32_t garbled = 0;
    uint32_t overlong = 0;
    char body[WITNESS_LINE_MAX];
    memset(&line, 0, sizeof line);
    for (size_t i = 0; i < size; i++) {
        held[count] = data[i];
        count += count < HELD_MAX - 1u ? 1u : 0u;
        enum rr_line_kind kind = rr_line_take(&line, data[i]);
        if (data[i] != '\n') {
            demand(kind == RR_LINE_NONE, "BAD-3: judged before its LF");
            continue;
        }
        enum rr_line_kind wanted = expected(held, count, body);
        garbled += wanted == RR_LINE_GARBLED ? 1u : 0u;
        overlong += count > RR_HOST_LINE_MAX ? 1u : 0u;
        demand(kind == wanted, "BAD-2: the kind of line");
        demand(line.garbled == garbled && line.overlong == overlong, "BAD-3: the counts");
        if (kind == RR_LINE_REQUEST) {
            check_request(&line, body);
        }
        count = 0;
    }
    return 0;
}
