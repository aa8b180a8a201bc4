/* Values that survive power-off; see store.h. */
#include "store.h"

#include "check.h"

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

/* Reads one of the slot's two records; false where it is not whole. */
static bool read_record(const struct rr_port *port, void *self, uint8_t slot, uint8_t copy, uint8_t *record)
{
    return port->load(self, place_of(slot, copy), record, RR_RECORD) && record[GENERATION] != ERASED &&
           check_of(record, slot) == (uint16_t)(record[CHECK] << 8 | record[CHECK + 1u]);
}

/* The newer whole copy: 0, 1, or 2 where there is none. `record` holds it. */
static uint8_t newer(const struct rr_port *port, void *self, uint8_t slot, uint8_t *record)
{
    uint8_t other[RR_RECORD];
    bool first = read_record(port, self, slot, 0, record);
    bool second = read_record(port, self, slot, 1, other);
    if (second && (!first || other[GENERATION] == next_generation(record[GENERATION]))) {
        for (uint8_t i = 0; i < RR_RECORD; i++) {
            record[i] = other[i];
        }
        return 1;
    }
    return first ? 0 : 2;
}

bool rr_store_read(const struct rr_port *port, void *self, uint8_t slot, int32_t *value)
{
    uint8_t record[RR_RECORD];
    if (newer(port, self, slot, record) == 2) {
        return false;
    }
    *value = (int32_t)((uint32_t)record[0] << 24 | (uint32_t)record[1] << 16 | (uint32_t)record[2] << 8 | record[3]);
    return true;
}

bool rr_store_write(const struct rr_port *port, void *self, uint8_t slot, int32_t value)
{
    uint8_t record[RR_RECORD];
    uint8_t copy = newer(port, self, slot, record);
    uint16_t place = place_of(slot, copy == 0 ? 1 : 0);
    record[GENERATION] = copy == 2 ? 0 : next_generation(record[GENERATION]);
    for (uint8_t i = 0; i < CHECK; i++) {
        record[i] = (uint8_t)((uint32_t)value >> (24 - 8 * i));
    }
    uint16_t crc = check_of(record, slot);
    record[CHECK] = (uint8_t)(crc >> 8);
    record[CHECK + 1u] = (uint8_t)crc;
    return port->store(self, place, record, GENERATION) &&
           port->store(self, (uint16_t)(place + GENERATION), &record[GENERATION], 1);
}
