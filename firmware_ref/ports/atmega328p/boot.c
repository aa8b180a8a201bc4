/* What happens before `main`; see boot.h. */
#include "boot.h"

#include "board.h"

#include "../../core/words.h"

#include <avr/wdt.h>
#include <stdbool.h>

/* Kept through the clearing of memory that comes after it. */
static uint8_t reset_flags __attribute__((section(".noinit")));

/* The first instructions after a reset, before there is a stack: single-bit writes, which need no register. Until here the
 * pins are inputs, and the pull-downs of WIRING.md hold them. */
void boot_outputs_off(void) __attribute__((naked, used, section(".init0")));
void boot_outputs_off(void)
{
    ENABLE_PORT &= (uint8_t)~(1u << ENABLE_BIT);
    ENABLE_DDR |= 1u << ENABLE_BIT;
    FORWARD_PORT &= (uint8_t)~(1u << FORWARD_BIT);
    FORWARD_DDR |= 1u << FORWARD_BIT;
    REVERSE_PORT &= (uint8_t)~(1u << REVERSE_BIT);
    REVERSE_DDR |= 1u << REVERSE_BIT;
    SERVO_PORT &= (uint8_t)~(1u << SERVO0_BIT);
    SERVO_DDR |= 1u << SERVO0_BIT;
    SERVO_PORT &= (uint8_t)~(1u << SERVO1_BIT);
    SERVO_DDR |= 1u << SERVO1_BIT;
}

/* After a watchdog reset the watchdog still runs, at its shortest time: off, until `main` sets it. */
void boot_keep_cause(void) __attribute__((naked, used, section(".init3")));
void boot_keep_cause(void)
{
    reset_flags = MCUSR;
    MCUSR = 0;
    wdt_disable();
}

uint8_t boot_cause(void)
{
    if ((reset_flags & 1u << WDRF) != 0) {
        return RR_CAUSE_WATCHDOG;
    }
    if ((reset_flags & 1u << PORF) != 0) { /* with BORF beside it: the supply had to rise */
        return RR_CAUSE_POWER;
    }
    if ((reset_flags & 1u << BORF) != 0) {
        return RR_CAUSE_BROWNOUT;
    }
    return (reset_flags & 1u << EXTRF) != 0 ? RR_CAUSE_EXTERNAL : RR_CAUSE_SOFTWARE;
}

uint8_t boot_fault(void)
{
    bool high = (FORWARD_PIN & 1u << FORWARD_BIT) != 0 || (REVERSE_PIN & 1u << REVERSE_BIT) != 0 ||
                (ENABLE_PIN & 1u << ENABLE_BIT) != 0;
    return high ? 1 : 0;
}
