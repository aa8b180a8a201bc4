/* Values that survive power-off; see store.h. */
#include "store.h"

#include "check.h"

#include <string.h>

#define CHECK      4u
#define GENERATION 6u
#define ERASED     0xFFu /* a generation that is never given */

static uint8_t next_generation(uint8_t generation)
{
    return generation + 1u >= ERASED ? 0 : (uint8_t)(generation + 1u);
}

static uint16_t check_of(const uint8_t *record, uint8_t slot)
{
    uint16_t crc = rr_crc16(RR_CRC16_START, slot); /* so that a record in a wrong place is not taken */
    for (uint8_t i = 0; i < CHECK; i++) {
        crc = rr_crc16(crc, record[i]);
    }
    return rr_crc16(crc, record[GENERATION]);
}

static uint16_t place_of(uint8_t slot, uint8_t copy)
{
    return (uint16_t)(slot * RR_SLOT + copy * RR_RECORD);
}

static bool is_whole(const uint8_t *record, uint8_t slot)
{
    uint16_t check = check_of(record, slot);
    return record[GENERATION] != ERASED && record[CHECK] == (uint8_t)(check >> 8) && record[CHECK + 1u] == (uint8_t)check;
}

enum newer { FIRST, SECOND, NEITHER, BUSY };

/* Which of the slot's two records is the newer whole one; `record` holds it. BUSY where they cannot be read now. */
static uint8_t newer(const struct rr_port *port, void *self, uint8_t slot, uint8_t *record)
{
    (void)port; /* where RR_ONLY_PORT names it */
    (void)self;
    uint8_t other[RR_RECORD];
    if (!RR_THE_PORT(port)->load(self, place_of(slot, 0), record, RR_RECORD) ||
        !RR_THE_PORT(port)->load(self, place_of(slot, 1), other, RR_RECORD)) {
        return BUSY;
    }
    bool first = is_whole(record, slot);
    if (is_whole(other, slot) && (!first || other[GENERATION] == next_generation(record[GENERATION]))) {
        memcpy(record, other, RR_RECORD);
        return SECOND;
    }
    return first ? FIRST : NEITHER;
}

bool rr_store_read(const struct rr_port *port, void *self, uint8_t slot, int32_t *value)
{
    uint8_t record[RR_RECORD];
    if (newer(port, self, slot, record) >= NEITHER) {
        return false;
    }
    uint32_t read = 0;
    for (uint8_t i = 0; i < CHECK; i++) {
        read = read << 8 | record[i];
    }
    *value = (int32_t)read;
    return true;
}

bool rr_store_write(const struct rr_port *port, void *self, uint8_t slot, int32_t value)
{
    uint8_t record[RR_RECORD];
    uint8_t copy = newer(port, self, slot, record);
    if (copy == BUSY) {
        return false;
    }
    uint16_t place = place_of(slot, copy == FIRST ? 1 : 0);
    record[GENERATION] = copy == NEITHER ? 0 : next_generation(record[GENERATION]);
    uint32_t rest = (uint32_t)value;
    for (uint8_t i = CHECK; i != 0; rest >>= 8) {
        record[--i] = (uint8_t)rest;
    }
    uint16_t crc = check_of(record, slot);
    record[CHECK] = (uint8_t)(crc >> 8);
    record[CHECK + 1u] = (uint8_t)crc;
    return RR_THE_PORT(port)->store(self, place, record, GENERATION) &&
           RR_THE_PORT(port)->store(self, (uint16_t)(place + GENERATION), &record[GENERATION], 1);
}
