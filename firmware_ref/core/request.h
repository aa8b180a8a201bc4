/* A request as read from its line, and how its body is kept to know a repetition (SPEC TAG-3). */
#ifndef RAMPRIG_REQUEST_H
#define RAMPRIG_REQUEST_H

#include "fields.h"

/* The last request's body, whole or by its checks. */
struct rr_body {
#if RR_KEEP_BODY
    char text[RR_BODY_MAX + 1];
#else
    uint16_t length;
    uint16_t crc;
    uint16_t sum;
    uint16_t sum_of_sums;
#endif
};

/* A request as read from its line. */
struct rr_request {
    struct rr_arguments given;
    struct rr_body body;
    uint8_t word;
    uint8_t place;  /* of the limit it names */
    uint8_t reason; /* why it is refused whatever the state, or RR_REASON_COUNT */
    bool kept_tag;  /* it bears the tag of the request that is kept ... */
    bool repeated;  /* ... and its body */
};

/* Takes a request's body. */
void rr_body_take(struct rr_body *body, const char *text);

/* Are the two the same? */
bool rr_body_equals(const struct rr_body *body, const struct rr_body *other);

#endif
