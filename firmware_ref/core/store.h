/* Values that survive power-off: two copies of each, so that a power cut at any byte leaves the old or the new value.
 *
 * A slot is two records of RR_RECORD bytes; a record is a value, a CRC-16 over it, its slot and its generation, and last
 * the generation. The one written is always the older or broken one of the two. Its generation is written by itself, after
 * all else: until then the record has its old generation, older than that of the other record, or that of erased bytes,
 * which no whole record has. So neither a cut nor a byte that power-off spoils can leave a third value, not even where a
 * half-written record should have a right check by chance. */
#ifndef RAMPRIG_STORE_H
#define RAMPRIG_STORE_H

#include "port.h"

#include <stdbool.h>
#include <stdint.h>

#define RR_RECORD 7u             /* bytes: value 4, check 2, generation 1 */
#define RR_SLOT   (2u * RR_RECORD)
#define RR_SLOT_BOOT 0u          /* the boot number; the limits follow in the order of the digest */
#define RR_STORE_BYTES (RR_SLOT * (1u + RR_LIMITS))

/* Reads a slot. False where neither record is whole; `value` is then left alone. */
bool rr_store_read(const struct rr_port *port, void *self, uint8_t slot, int32_t *value);

/* Writes a slot. False where the port has no store, or it is busy: then nothing has been written. */
bool rr_store_write(const struct rr_port *port, void *self, uint8_t slot, int32_t value);

#endif
