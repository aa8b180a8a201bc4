/* A request's body, kept to know a repetition; see request.h. */
#include "request.h"

#if RR_KEEP_BODY

#include <string.h>

void rr_body_take(struct rr_body *body, const char *text)
{
    strcpy(body->text, text);
}

bool rr_body_equals(const struct rr_body *body, const struct rr_body *other)
{
    return strcmp(body->text, other->text) == 0;
}

#else

#include "check.h"

#include <string.h>

void rr_body_take(struct rr_body *body, const char *text)
{
    body->length = 0;
    body->crc = RR_CRC16_START;
    body->sum = 0;
    body->sum_of_sums = 0;
    while (*text != '\0') {
        uint8_t byte = (uint8_t)*text++;
        body->length++;
        body->crc = rr_crc16(body->crc, byte);
        body->sum = (uint16_t)(body->sum + byte);
        body->sum_of_sums = (uint16_t)(body->sum_of_sums + body->sum);
    }
}

bool rr_body_equals(const struct rr_body *body, const struct rr_body *other)
{
    return memcmp(body, other, sizeof *body) == 0; /* four of 16 bits: no gaps */
}

#endif
