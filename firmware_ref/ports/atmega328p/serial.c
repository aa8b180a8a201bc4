/* The UART; see serial.h. */
#include "serial.h"

#include "baud.h"
#include "board.h"

#include <avr/interrupt.h>
#include <avr/io.h>

/* Each ring holds one byte less than its size. Main reads every 0.4 ms at the latest, which is 20 bytes at 500 kbaud. */
#define RECEIVE_RING 23u
#define SEND_RING 16u /* what is said waits in the core; this bridges a tick */
#define AFTER(place, ring) ((uint8_t)((place) + 1u == (ring) ? 0 : (place) + 1u))

static volatile uint8_t received[RECEIVE_RING];
static volatile uint8_t received_in;
static volatile uint8_t received_out;
static volatile uint8_t sending[SEND_RING];
static volatile uint8_t sending_in;
static volatile uint8_t sending_out;
static volatile bool broke;
static volatile uint8_t lost;
static uint8_t lost_before; /* of them */
static uint32_t lost_ever;  /* those before */

/* A byte with a framing error is kept as one that no line may have, so that its line is refused; a zero is a BREAK, and no
 * byte at all. */
#define SPOILT 0xFFu

ISR(USART_RX_vect)
{
    uint8_t status = UCSR0A;
    uint8_t byte = UDR0;
    if ((status & 1u << DOR0) != 0) {
        lost++;
    }
    if ((status & 1u << FE0) != 0) {
        if (byte == 0) {
            broke = true;
            return;
        }
        byte = SPOILT;
    }
    uint8_t in = received_in;
    uint8_t next = AFTER(in, RECEIVE_RING);
    if (next == received_out) {
        lost++;
        return;
    }
    received[in] = byte;
    received_in = next;
}

ISR(USART_UDRE_vect)
{
    uint8_t out = sending_out;
    if (out == sending_in) {
        UCSR0B = 1u << RXCIE0 | 1u << RXEN0 | 1u << TXEN0;
        return;
    }
    UDR0 = sending[out];
    sending_out = AFTER(out, SEND_RING);
}

void serial_begin(void)
{
    UBRR0 = (uint16_t)BAUD_UBRR(F_CPU, BAUD, BAUD_CLOCKS(F_CPU, BAUD));
    UCSR0A = BAUD_DOUBLE(F_CPU, BAUD) ? 1u << U2X0 : 0u;
    UCSR0C = 1u << UCSZ01 | 1u << UCSZ00; /* 8N1 */
    UCSR0B = 1u << RXCIE0 | 1u << RXEN0 | 1u << TXEN0;
}

bool serial_is_quiet(void)
{
    return received_out == received_in;
}

int serial_read(void)
{
    uint8_t out = received_out;
    if (out == received_in) {
        return -1;
    }
    uint8_t byte = received[out];
    received_out = AFTER(out, RECEIVE_RING);
    return byte;
}

uint8_t serial_room(void)
{
    return (uint8_t)(((unsigned)(sending_out - sending_in) - 1u) & (SEND_RING - 1u));
}

void serial_write(uint8_t byte)
{
    uint8_t in = sending_in;
    sending[in] = byte;
    sending_in = AFTER(in, SEND_RING);
    UCSR0B = 1u << RXCIE0 | 1u << RXEN0 | 1u << TXEN0 | 1u << UDRIE0;
}

bool serial_took_break(void)
{
    uint8_t now = lost; /* looked at every tick, in which no 256 bytes come */
    lost_ever += (uint8_t)(now - lost_before);
    lost_before = now;
    bool took = broke;
    if (took) {
        broke = false;
    }
    return took;
}

uint32_t serial_overruns(void)
{
    return lost_ever;
}
