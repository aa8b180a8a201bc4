/* What happens before `main`: outputs off, and why the board was reset. */
#ifndef ATMEGA328P_BOOT_H
#define ATMEGA328P_BOOT_H

#include <stdint.h>

/* The reset's cause (enum rr_cause). */
uint8_t boot_cause(void);

/* The number of a failed self-test, or 0: 1 = an output that is driven low reads high. */
uint8_t boot_fault(void);

#endif
