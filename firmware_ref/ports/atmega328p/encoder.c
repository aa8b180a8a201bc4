/* The quadrature encoder outside its interrupt; see encoder.h. */
#include "encoder.h"

#include "board.h"

#include <util/atomic.h>

/* The interrupt's memory is in the general purpose registers, which it reaches in one cycle: GPIOR0 the last reading of
 * port D, GPIOR2:GPIOR1 the counts, wrapping. */
_Static_assert(ENCODER_A_BIT == 4 && ENCODER_B_BIT == 5, "encoder.S has the bits in its code");

volatile uint32_t encoder_illegal_count; /* counted by encoder.S */

static uint16_t taken;

void encoder_begin(void)
{
    PORTD |= 1u << ENCODER_A_BIT | 1u << ENCODER_B_BIT; /* pull-ups, for encoders with open collectors */
    GPIOR0 = PIND;
    GPIOR1 = 0;
    GPIOR2 = 0;
    PCMSK2 = 1u << PCINT20 | 1u << PCINT21;
    PCICR = 1u << PCIE2;
}

int16_t encoder_moved(void)
{
    uint16_t now;
    ATOMIC_BLOCK(ATOMIC_RESTORESTATE) /* three cycles */
    {
        now = (uint16_t)(GPIOR1 | (uint16_t)GPIOR2 << 8);
    }
    int16_t moved = (int16_t)(uint16_t)(now - taken);
    taken = now;
    return moved;
}

uint32_t encoder_illegal(void)
{
    uint32_t now;
    ATOMIC_BLOCK(ATOMIC_RESTORESTATE)
    {
        now = encoder_illegal_count;
    }
    return now;
}
