/* The device's end of the lockstep frames; see lockstep.h. */
#include "lockstep.h"

#include <string.h>

void lockstep_begin(struct lockstep *lockstep, const struct simulated *s)
{
    uint64_t board_us = s->ticks * RR_TICK_US;
    lockstep->length = 0;
    if (lockstep->now_us < board_us) {
        lockstep->now_us = board_us;
    }
}

static uint64_t number(const uint8_t *bytes, uint8_t count)
{
    uint64_t value = 0;
    for (uint8_t i = 0; i < count; i++) {
        value |= (uint64_t)bytes[i] << (8 * i);
    }
    return value;
}

static void put_number(uint8_t *bytes, uint64_t value, uint8_t count)
{
    for (uint8_t i = 0; i < count; i++) {
        bytes[i] = (uint8_t)(value >> (8 * i));
    }
}

static uint32_t carry_out(struct lockstep *lockstep, struct simulated *s, uint8_t *reply)
{
    uint64_t until_us = lockstep->now_us + number(lockstep->frame + 1, 4);
    uint32_t length = 0;
    const char *sent = "";
    simulated_receive(s, lockstep->frame + LOCKSTEP_GRANT, lockstep->length - LOCKSTEP_GRANT);
    uint64_t due = until_us / RR_TICK_US;
    while (length == 0 && s->ticks < due) {
        uint64_t left = due - s->ticks;
        (void)simulated_run(s, left > UINT32_MAX ? UINT32_MAX : (uint32_t)left, false);
        sent = simulated_take(s, &length);
    }
    uint64_t board_us = s->ticks * RR_TICK_US;
    if (length == 0) {
        lockstep->now_us = until_us;
    } else if (board_us > lockstep->now_us) {
        lockstep->now_us = board_us;
    }
    reply[0] = 'B';
    put_number(reply + 1, lockstep->now_us, 8);
    put_number(reply + 9, length, 2);
    memcpy(reply + LOCKSTEP_REPLY, sent, length);
    return LOCKSTEP_REPLY + length;
}

uint32_t lockstep_take(struct lockstep *lockstep, struct simulated *s, uint8_t byte, uint8_t *reply, bool *right)
{
    *right = lockstep->length > 0 || byte == 'A';
    if (!*right) {
        return 0;
    }
    lockstep->frame[lockstep->length++] = byte;
    if (lockstep->length < LOCKSTEP_GRANT ||
        lockstep->length < LOCKSTEP_GRANT + (uint32_t)number(lockstep->frame + 5, 2)) {
        return 0;
    }
    uint32_t length = carry_out(lockstep, s, reply);
    lockstep->length = 0;
    return length;
}
