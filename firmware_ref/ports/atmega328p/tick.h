/* The 1 kHz tick by Timer0, how long the work in it takes, and sleep until something happens. */
#ifndef ATMEGA328P_TICK_H
#define ATMEGA328P_TICK_H

#include <stdbool.h>
#include <stdint.h>

void tick_begin(void);

/* True when a tick is due; it is then taken as begun. */
bool tick_take(void);

/* The work of the tick is done: notes its time, from when it was due. */
void tick_end(void);

/* The worst time so far in us, to 4 us. */
uint16_t tick_worst_us(void);

/* True while there is time before the next tick for a long piece of idle work. */
bool tick_is_early(void);

/* True where the next tick is so near that it is better waited for. */
bool tick_is_near(void);

/* Sleeps until the next interrupt, unless a tick is due. To be called with interrupts off; they may be on afterwards. */
void tick_sleep(void);

#endif
