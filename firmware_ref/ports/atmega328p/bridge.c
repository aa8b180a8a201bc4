/* The H-bridge's two inputs and its enable; see bridge.h. */
#include "bridge.h"

#include "board.h"

/* Phase-correct PWM: a compare value of 0 is low throughout, 255 high throughout, without a spike between. */
#define MODE (1u << WGM20)

#if PWM_DIVISOR == 1
#define CLOCK (1u << CS20)
#elif PWM_DIVISOR == 8
#define CLOCK (1u << CS21)
#elif PWM_DIVISOR == 32
#define CLOCK (1u << CS21 | 1u << CS20)
#else
#error "PWM_DIVISOR is 1, 8 or 32"
#endif

enum state { COAST, BRAKE, FORWARD, REVERSE };

static uint8_t state = COAST;

/* floor(size x 255 / 10000 + 1/2), by a factor of 1671 / 65536. */
static uint8_t compare_of(uint16_t size)
{
    return (uint8_t)(((uint32_t)size * 1671u + 0x8000u) >> 16);
}

static void both_low(void)
{
    TCCR2A = MODE; /* the pins go back to their port bits */
    FORWARD_PORT &= (uint8_t)~(1u << FORWARD_BIT);
    REVERSE_PORT &= (uint8_t)~(1u << REVERSE_BIT);
}

void bridge_begin(void)
{
    TCCR2A = MODE;
    TCCR2B = CLOCK;
}

void bridge_drive(int16_t duty, bool brake)
{
    uint8_t wanted = duty > 0 ? FORWARD : duty < 0 ? REVERSE : brake ? BRAKE : COAST;
    if (wanted != state) {
        both_low();
        state = wanted;
        if (wanted == BRAKE) {
            FORWARD_PORT |= 1u << FORWARD_BIT;
            REVERSE_PORT |= 1u << REVERSE_BIT;
        }
    }
    if (wanted == FORWARD) {
        OCR2A = compare_of((uint16_t)duty);
        TCCR2A = MODE | 1u << COM2A1;
    } else if (wanted == REVERSE) {
        OCR2B = compare_of((uint16_t)-duty);
        TCCR2A = MODE | 1u << COM2B1;
    }
    ENABLE_PORT |= 1u << ENABLE_BIT;
}

void bridge_off(void)
{
    ENABLE_PORT &= (uint8_t)~(1u << ENABLE_BIT);
    both_low();
    state = COAST;
}
