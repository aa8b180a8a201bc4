/* Two servo pulses; see pulses.h. */
#include "pulses.h"

#include "board.h"

#include "../../core/servo.h"

/* Fast PWM with ICR1 as its top (mode 14): 2 MHz, 40000 steps a frame. */
#define FRAME_STEPS 40000u
#define MODE_A (1u << WGM11)
#define MODE_B (1u << WGM13 | 1u << WGM12 | 1u << CS11)

static uint16_t set_steps[2]; /* of 0.5 us; 0 = no pulse */

static uint8_t output_bit(uint8_t servo)
{
    return servo == 0 ? 1u << COM1A1 : 1u << COM1B1;
}

/* A pulse cut short leaves the timer's own output high, and connecting it anew would give a pulse of any length: forced
 * low, which only a mode without PWM can. */
static void force_low(uint8_t servo)
{
    uint8_t others = (uint8_t)(TCCR1A & (1u << COM1A1 | 1u << COM1B1));
    TCCR1B = 1u << CS11;
    TCCR1A = (uint8_t)(others | output_bit(servo));
    TCCR1C = servo == 0 ? 1u << FOC1A : 1u << FOC1B;
    TCCR1A = (uint8_t)(others | MODE_A);
    TCCR1B = MODE_B;
}

void pulses_begin(void)
{
    ICR1 = FRAME_STEPS - 1u;
    TCCR1A = MODE_A;
    TCCR1B = MODE_B;
}

void pulses_set(uint8_t servo, uint32_t pulse_ns)
{
    uint16_t us = rr_servo_us((rr_ns)pulse_ns);
    bool half = pulse_ns - (uint32_t)us * 1000u >= 500u;
    uint16_t steps = (uint16_t)(2u * us + (half ? 1u : 0u));
    if (steps == set_steps[servo]) {
        return;
    }
    if (steps == 0) {
        TCCR1A &= (uint8_t)~output_bit(servo);
        set_steps[servo] = 0;
        return;
    }
    uint16_t compare = (uint16_t)(steps - 1u); /* high for one step more than the compare value */
    if (servo == 0) {
        OCR1A = compare;
    } else {
        OCR1B = compare;
    }
    if (set_steps[servo] == 0) {
        force_low(servo);
        TCCR1A |= output_bit(servo);
    }
    set_steps[servo] = steps;
}

void pulses_off(void)
{
    TCCR1A = MODE_A;
    set_steps[0] = 0;
    set_steps[1] = 0;
}
