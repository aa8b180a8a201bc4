/* Bytes from the host to whole lines with a right check (SPEC sections 4 and 7). */
#ifndef RAMPRIG_LINE_H
#define RAMPRIG_LINE_H

#include "request.h"

#include <stdbool.h>
#include <stdint.h>

enum rr_line_kind {
    RR_LINE_NONE,    /* no line has ended with this byte */
    RR_LINE_REQUEST, /* a right check and a well-formed tag: `tag`, and `text` from the byte after the tag's space */
    RR_LINE_BARE_STOP,
    RR_LINE_BARE_WHO,
    RR_LINE_GARBLED /* refused and counted */
};

struct rr_line {
    uint8_t length; /* bytes held; RR_HOST_LINE_MAX once the line is too long */
    uint8_t body;   /* length of the body once a line is whole */
    uint8_t tag;
    uint32_t garbled;
    uint32_t overlong;
    union {
        char text[RR_HOST_LINE_MAX]; /* the body, ended by NUL once a line is whole */
        struct rr_request request;   /* in its place, once whoever took the line has read it */
    } u;
};

/* The body of a whole request after its tag and space. */
const char *rr_line_body(const struct rr_line *line);

/* Takes one byte and says what it ended. The text stays whole until the next call. */
enum rr_line_kind rr_line_take(struct rr_line *line, uint8_t byte);

#endif
