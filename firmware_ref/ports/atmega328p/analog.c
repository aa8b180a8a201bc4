/* Motor current and supply by the converter; see analog.h.
 *
 * A conversion takes 104 us (125 kHz, the data sheet's range for 10 bits is 50 to 200 kHz). The supply, then four of the
 * current: a round takes 520 us, and what a tick judges is the mean of the current over the last 416 us of it. */
#include "analog.h"

#include "board.h"

#include <avr/interrupt.h>
#include <util/atomic.h>

#define CURRENT_READINGS 4u
#define STEPS 1024ul

#define REFERENCE (1u << REFS0) /* AVCC, the sensors' own supply, so that its changes cancel */
#define START (1u << ADEN | 1u << ADSC | 1u << ADIE | 1u << ADPS2 | 1u << ADPS1 | 1u << ADPS0)

static volatile uint16_t current_sum;
static volatile uint16_t supply_reading;
static volatile uint8_t readings; /* of the round; the supply comes first */
static volatile uint16_t current_so_far;
static volatile bool whole_round;

ISR(ADC_vect)
{
    uint16_t reading = ADC;
    uint8_t place = readings;
    readings = (uint8_t)(place + 1u);
    if (place == 0) {
        supply_reading = reading;
        current_so_far = 0;
        ADMUX = REFERENCE | CURRENT_CHANNEL;
        ADCSRA = START;
        return;
    }
    uint16_t sum = (uint16_t)(current_so_far + reading);
    if (place == CURRENT_READINGS) {
        current_sum = sum;
        whole_round = true;
        return;
    }
    current_so_far = sum;
    ADCSRA = START;
}

void analog_start(void)
{
    if (readings <= CURRENT_READINGS) { /* the last round still runs: after a tick that was late */
        return;
    }
    readings = 0;
    ADMUX = REFERENCE | SUPPLY_CHANNEL;
    ADCSRA = START;
}

void analog_begin(void)
{
    DIDR0 = 1u << CURRENT_CHANNEL | 1u << SUPPLY_CHANNEL;
    readings = CURRENT_READINGS + 1u;
    analog_start();
}

bool analog_is_ready(void)
{
    return whole_round;
}

static uint16_t read_whole(const volatile uint16_t *value)
{
    uint16_t read;
    ATOMIC_BLOCK(ATOMIC_RESTORESTATE)
    {
        read = *value;
    }
    return read;
}

int16_t analog_current_ma(void)
{
    int16_t off_middle = (int16_t)(read_whole(&current_sum) - CURRENT_READINGS * STEPS / 2u);
    return (int16_t)(((int32_t)off_middle * (int32_t)CURRENT_SPAN_MA) >> 12);
}

_Static_assert(CURRENT_READINGS * STEPS == 1ul << 12, "analog_current_ma shifts by it");
_Static_assert(CURRENT_SPAN_MA / 2u < 32768u, "a current fits 16 bits");

uint16_t analog_supply_mv(void)
{
    return (uint16_t)((uint32_t)read_whole(&supply_reading) * SUPPLY_SPAN_MV >> 10);
}
