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

ISR(EE_READY_vect)
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

bool keeping_store(uint16_t offset, const uint8_t *bytes, uint8_t length)
{
    bool goes_on = false;
    ATOMIC_BLOCK(ATOMIC_RESTORESTATE) /* some 10 us, when a limit is set */
    {
        goes_on = left != 0 && offset == address + left && next + left + length <= RECORD;
        if (goes_on || (!is_busy() && length <= RECORD)) {
            if (!goes_on) {
                address = offset;
                next = 0;
                left = 0;
            }
            for (uint8_t i = 0; i < length; i++) {
                record[next + left + i] = bytes[i];
            }
            left = (uint8_t)(left + length);
            EECR |= 1u << EERIE; /* ready at once: the interrupt writes the first */
            goes_on = true;
        }
    }
    return goes_on;
}
