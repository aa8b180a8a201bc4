/* Pins and scales of the board, as WIRING.md draws them. Change them here for another wiring. */
#ifndef ATMEGA328P_BOARD_H
#define ATMEGA328P_BOARD_H

#include <avr/io.h>

/* The bridge driver: two inputs (both low = coast, both high = brake, one of them PWM = drive) and an enable. */
#define FORWARD_PORT PORTB /* OC2A, Timer2 */
#define FORWARD_DDR  DDRB
#define FORWARD_PIN  PINB
#define FORWARD_BIT  3
#define REVERSE_PORT PORTD /* OC2B, Timer2 */
#define REVERSE_DDR  DDRD
#define REVERSE_PIN  PIND
#define REVERSE_BIT  3
#define ENABLE_PORT  PORTD
#define ENABLE_DDR   DDRD
#define ENABLE_PIN   PIND
#define ENABLE_BIT   7

/* Timer2's clock: the PWM's rate is 16 MHz / (510 x the divisor). 1 = 31.4 kHz, 8 = 3.9 kHz, 32 = 980 Hz. */
#ifndef PWM_DIVISOR
#define PWM_DIVISOR 1
#endif

/* The servos, on the outputs of Timer1: OC1A and OC1B. */
#define SERVO_PORT PORTB
#define SERVO_DDR  DDRB
#define SERVO0_BIT 1
#define SERVO1_BIT 2

/* The encoder: both signals on port D, so that one reading takes both. encoder.S has the bits in its code too. */
#define ENCODER_A_BIT 4
#define ENCODER_B_BIT 5

/* Analog inputs. */
#define CURRENT_CHANNEL 0
#define SUPPLY_CHANNEL  1

/* Current: a Hall sensor of 185 mV/A with 2.5 V at rest, at a reference of 5 V: 5 V span 27027 mA. */
#define CURRENT_SPAN_MA 27027ul
/* Supply: a divider of 33 kOhm over 10 kOhm: 5 V at the pin are 21500 mV. */
#define SUPPLY_SPAN_MV 21500ul

#ifndef BAUD
#define BAUD 115200ul
#endif

/* Identity (SPEC WHO-1, WHO-3): give every board a serial of its own when it is built. */
#ifndef SERIAL
#define SERIAL "unset"
#endif
#ifndef FIRMWARE_NAME
#define FIRMWARE_NAME "ref-1.0.0"
#endif
#ifndef BOARD_NAME
#define BOARD_NAME    "atmega328p"
#endif

#endif
