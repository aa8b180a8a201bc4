/* Motor current and supply by the converter, round and round. */
#ifndef ATMEGA328P_ANALOG_H
#define ATMEGA328P_ANALOG_H

#include <stdbool.h>
#include <stdint.h>

/* Starts converting; interrupts must be on soon. */
void analog_begin(void);

/* True once each input has been read. */
bool analog_is_ready(void);

/* The mean of the last four readings, signed: 0 mA at half the reference. */
int16_t analog_current_ma(void);

uint16_t analog_supply_mv(void);

#endif
