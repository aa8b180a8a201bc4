/* Values that survive power-off; see store.h. */
#include "store.h"

#include "check.h"

static uint16_t check_of(const uint8_t *record, uint8_t slot)
{
    uint16_t crc = rr_crc16(RR_CRC16_START, slot); /* so that a record in a wrong place is not taken */
    for (uint8_t i = 0; i < 5; i++) {
        crc = rr_crc16(crc, record[i]);
    }
    return crc;
}

/* Reads one of the slot's two records; false where it is not whole. */
static bool read_record(const struct rr_port *port, void *self, uint8_t slot, uint8_t copy, uint8_t *record)
{
    uint16_t offset = (uint16_t)(slot * RR_SLOT + copy * RR_RECORD);
    if (!port->load(self, offset, record, RR_RECORD)) {
        return false;
    }
    return check_of(record, slot) == (uint16_t)(record[5] << 8 | record[6]);
}

/* The newer whole copy: 0, 1, or 2 where there is none. `record` holds it. */
static uint8_t newer(const struct rr_port *port, void *self, uint8_t slot, uint8_t *record)
{
    uint8_t other[RR_RECORD];
    bool first = read_record(port, self, slot, 0, record);
    bool second = read_record(port, self, slot, 1, other);
    if (second && (!first || (int8_t)(uint8_t)(other[4] - record[4]) > 0)) {
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
    uint8_t generation = copy == 2 ? 0 : (uint8_t)(record[4] + 1u);
    for (uint8_t i = 0; i < 4; i++) {
        record[i] = (uint8_t)((uint32_t)value >> (24 - 8 * i));
    }
    record[4] = generation;
    uint16_t crc = check_of(record, slot);
    record[5] = (uint8_t)(crc >> 8);
    record[6] = (uint8_t)crc;
    return port->store(self, (uint16_t)(slot * RR_SLOT + (copy == 0 ? 1u : 0u) * RR_RECORD), record, RR_RECORD);
}
