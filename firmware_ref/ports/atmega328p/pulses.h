/* Two servo pulses, 50 times a second in steps of 0.5 us, made by Timer1 alone. */
#ifndef ATMEGA328P_PULSES_H
#define ATMEGA328P_PULSES_H

#include <stdint.h>

/* Starts Timer1; no pulses yet. */
void pulses_begin(void);

/* Sets a pulse in ns, 0 = none: at once. A new width counts from the next frame on. */
void pulses_set(uint8_t servo, uint32_t pulse_ns);

/* No pulses. */
void pulses_off(void);

#endif
