/* The 1 kHz tick; see tick.h. */
#include "tick.h"

#include <avr/interrupt.h>
#include <avr/io.h>
#include <avr/sleep.h>

/* 16 MHz / 64 / 250 = 1 kHz. A test build may have a slower clock, to see each tick by itself. */
#define TOP 249u
#ifndef TICK_CLOCK
#define TICK_CLOCK (1u << CS01 | 1u << CS00)
#endif
#define US_A_STEP 4u
#define SHORT_STEPS 10u /* and the longest short one */
#define LONG_STEPS 125u /* in steps of 4 us: the longest piece of idle work, interrupts within it */

static volatile uint8_t due; /* ticks not yet begun: more than one where main was late, so that none is left out */
static uint16_t worst_steps;

ISR(TIMER0_COMPA_vect)
{
    due++;
}

void tick_begin(void)
{
    OCR0A = TOP;
    TCCR0A = 1u << WGM01;
    TCCR0B = TICK_CLOCK;
    TIMSK0 = 1u << OCIE0A;
    SMCR = 0; /* sleep is idle: timers, UART and converter run on */
}

bool tick_take(void)
{
    if (due == 0) {
        return false;
    }
    cli();
    due--;
    sei();
    return true;
}

void tick_end(void)
{
    uint16_t steps = TCNT0;
    steps = (uint16_t)(steps + due * (TOP + 1u));
    if (steps > worst_steps) {
        worst_steps = steps;
    }
}

uint16_t tick_worst_us(void)
{
    return (uint16_t)(worst_steps * US_A_STEP);
}

bool tick_is_early(void)
{
    return due == 0 && TCNT0 < TOP - LONG_STEPS;
}

bool tick_is_near(void)
{
    return TCNT0 >= TOP - SHORT_STEPS;
}

void tick_sleep(void)
{
    if (due == 0) {
        sleep_enable();
        sei(); /* the next instruction still runs before an interrupt */
        sleep_cpu();
        sleep_disable();
    }
}
