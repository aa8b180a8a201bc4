/* Motor current and supply by the converter, a round a tick. */
#ifndef ATMEGA328P_ANALOG_H
#define ATMEGA328P_ANALOG_H

#include <stdbool.h>
#include <stdint.h>

/* Sets the converter up and starts the first round; interrupts must be on soon. */
void analog_begin(void);

/* Starts a round: at a tick's end, so that it is done before the next one and none of its interrupts falls into a tick. */
void analog_start(void);

/* True once each input has been read. */
bool analog_is_ready(void);

/* The mean of the last four readings, signed: 0 mA at half the reference. */
int16_t analog_current_ma(void);

uint16_t analog_supply_mv(void);

#endif
