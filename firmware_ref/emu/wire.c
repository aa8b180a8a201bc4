/* The serial line between host and chip; see wire.h. */
#include "wire.h"

#include <simavr/sim_cycle_timers.h>
#include <simavr/sim_interrupts.h>

#include <string.h>

#define RX_VECTOR 18u /* USART_RX, counted from 0 = reset */

DEFINE_FIFO(uint16_t, uart_fifo);

static uint32_t held(const struct wire *wire)
{
    const uart_fifo_t *fifo = &wire->chip->uart->input;
    return (uint32_t)(fifo->write - fifo->read) & (uart_fifo_fifo_size - 1u);
}

/* A byte has come in whole. */
static void arrive(struct wire *wire, uint16_t symbol)
{
    avr_t *avr = wire->chip->avr;
    avr_uart_t *uart = wire->chip->uart;
    if (!avr_regbit_get(avr, uart->rxen)) {
        return;
    }
    if (held(wire) >= RECEIVER_DEPTH) {
        wire->lost++;
        avr_regbit_set(avr, uart->dor);
        return;
    }
    uart_fifo_write(&uart->input, symbol);
    avr_raise_interrupt(avr, &uart->rxc);
}

static uint16_t spoilt(struct wire *wire, uint16_t symbol)
{
    if (wire->noise == 0) {
        return symbol;
    }
    wire->dice = wire->dice * 6364136223846793005ull + 1442695040888963407ull; /* Knuth's MMIX constants, from memory */
    uint32_t roll = (uint32_t)(wire->dice >> 33);
    return roll % wire->noise == 0 ? (uint16_t)(symbol ^ 1u << (roll / wire->noise % 8u)) : symbol;
}

static avr_cycle_count_t next_byte(avr_t *avr, avr_cycle_count_t when, void *param)
{
    struct wire *wire = param;
    (void)avr;
    if (wire->under_way) {
        wire->under_way = false;
        arrive(wire, spoilt(wire, wire->shifting));
    }
    uint32_t cycles = chip_byte_cycles(wire->chip);
    if (wire->count == 0 || cycles == 0) {
        return 0;
    }
    wire->shifting = wire->to_chip[wire->first];
    wire->first = (wire->first + 1u) % WIRE_BYTES;
    wire->count--;
    wire->under_way = true;
    return when + cycles;
}

/* The receive interrupt has returned: another byte may be waiting. */
static void after_receiving(avr_irq_t *irq, uint32_t value, void *param)
{
    struct wire *wire = param;
    (void)irq;
    if (value == 0 && held(wire) != 0) {
        avr_raise_interrupt(wire->chip->avr, &wire->chip->uart->rxc);
    }
}

static void on_output(avr_irq_t *irq, uint32_t value, void *param)
{
    struct wire *wire = param;
    (void)irq;
    if (wire->sent < WIRE_BYTES) {
        wire->from_chip[wire->sent++] = (uint8_t)value;
    }
    wire->line_ended = wire->line_ended || (uint8_t)value == '\n';
}

void wire_begin(struct wire *wire, struct chip *chip)
{
    memset(wire, 0, sizeof *wire);
    wire->chip = chip;
    wire->dice = 1;
    avr_t *avr = chip->avr;
    avr_irq_register_notify(avr_io_getirq(avr, AVR_IOCTL_UART_GETIRQ('0'), UART_IRQ_OUTPUT), on_output, wire);
    avr_irq_register_notify(avr_get_interrupt_irq(avr, RX_VECTOR) + AVR_INT_IRQ_RUNNING, after_receiving, wire);
}

static void start(struct wire *wire)
{
    if (!wire->under_way) {
        avr_cycle_timer_cancel(wire->chip->avr, next_byte, wire);
        avr_cycle_timer_register(wire->chip->avr, 1, next_byte, wire);
    }
}

bool wire_put(struct wire *wire, const uint8_t *bytes, uint32_t count)
{
    if (wire->count + count > WIRE_BYTES) {
        return false;
    }
    for (uint32_t i = 0; i < count; i++) {
        wire->to_chip[(wire->first + wire->count++) % WIRE_BYTES] = bytes[i];
    }
    if (count != 0) {
        start(wire);
    }
    return true;
}

bool wire_put_symbol(struct wire *wire, uint16_t symbol)
{
    if (wire->count == WIRE_BYTES) {
        return false;
    }
    wire->to_chip[(wire->first + wire->count++) % WIRE_BYTES] = symbol;
    start(wire);
    return true;
}

void wire_after_reset(struct wire *wire)
{
    wire->under_way = false;
    if (wire->count != 0) {
        start(wire);
    }
}
