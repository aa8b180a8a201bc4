/* The quadrature encoder, x4, by pin changes. encoder.S is its interrupt. */
#ifndef ATMEGA328P_ENCODER_H
#define ATMEGA328P_ENCODER_H

#include <stdint.h>

void encoder_begin(void);

/* Takes over what has been counted since the last call; at most once a tick, at least every 32767 counts. */
int16_t encoder_moved(void);

/* Transitions that skipped a state, since start. */
uint32_t encoder_illegal(void);

#endif
