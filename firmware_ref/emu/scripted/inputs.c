/* Stands in for analog.c and encoder.c of the ATmega328P port, and for a temperature sensor: they measure what a test has
 * written here.
 *
 * A test build only. Vectors and random sessions ask for values to the mA, which no converter gives; all else of the port is
 * as it is. The emulated board's command `set` writes; the counts it writes into main.c's own `counts`, whole. */
#include "../../ports/atmega328p/analog.h"
#include "../../ports/atmega328p/encoder.h"

volatile int16_t scripted_current_ma;
volatile uint16_t scripted_supply_mv = 12000;
volatile int16_t scripted_temperature_dc = 250;
volatile int16_t scripted_moved; /* stays 0; volatile, or `counts` would be optimised away */

void analog_begin(void)
{
}

void analog_start(void)
{
}

bool analog_is_ready(void)
{
    return true;
}

int16_t analog_current_ma(void)
{
    return scripted_current_ma;
}

uint16_t analog_supply_mv(void)
{
    return scripted_supply_mv;
}

void encoder_begin(void)
{
}

int16_t encoder_moved(void)
{
    return scripted_moved;
}

uint32_t encoder_illegal(void)
{
    return 0;
}
