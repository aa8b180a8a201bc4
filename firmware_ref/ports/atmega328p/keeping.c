/* The store in EEPROM; see keeping.h.
 *
 * A byte takes 3.4 ms to write, a record 24 ms: far too long for a tick. */
#include "keeping.h"

#include <avr/eeprom.h>
#include <avr/interrupt.h>
#include <avr/io.h>
#include <util/atomic.h>

#define RECORD 7u

static uint8_t record[RECORD];
static volatile uint8_t left; /* bytes still to write */
static volatile uint8_t next;
static volatile uint16_t address;

/* The next byte on its way, or no more of them. */
static void write_next(void)
{
    if (left == 0) {
        EECR = 0;
        return;
    }
    EEAR = address++;
    EEDR = record[next++];
    left--;
    EECR = 1u << EERIE | 1u << EEMPE;
    EECR = 1u << EERIE | 1u << EEMPE | 1u << EEPE; /* within four cycles */
}

ISR(EE_READY_vect)
{
    write_next();
}

void keeping_begin(void)
{
    eeprom_busy_wait();
}

static bool is_busy(void)
{
    return (EECR & (1u << EERIE | 1u << EEPE)) != 0;
}

bool keeping_load(uint16_t offset, uint8_t *bytes, uint8_t length)
{
    if (is_busy()) {
        return false;
    }
    for (uint8_t i = 0; i < length; i++) {
        EEAR = offset + i;
        EECR = 1u << EERE;
        bytes[i] = EEDR;
    }
    return true;
}

/* Appends to what is to be written. */
static void append(const uint8_t *bytes, uint8_t length)
{
    for (uint8_t i = 0; i < length; i++) {
        record[next + left + i] = bytes[i];
    }
    left = (uint8_t)(left + length);
}

bool keeping_store(uint16_t offset, const uint8_t *bytes, uint8_t length)
{
    bool taken = false;
    ATOMIC_BLOCK(ATOMIC_RESTORESTATE) /* some 10 us, when a limit is set */
    {
        if (left != 0 && offset == address + left && (uint8_t)(next + left + length) <= RECORD) {
            append(bytes, length);
            taken = true;
        } else if (!is_busy() && length <= RECORD) {
            address = offset;
            next = 0;
            append(bytes, length);
            write_next();
            taken = true;
        }
    }
    return taken;
}
