/* The emulated ATmega328P; see chip.h, for the licence too. */
#include "chip.h"

#include <simavr/avr_adc.h>
#include <simavr/avr_eeprom.h>
#include <simavr/avr_extint.h>
#include <simavr/avr_ioport.h>
#include <simavr/sim_elf.h>
#include <simavr/sim_interrupts.h>

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define FREQUENCY (CYCLES_A_US * 1000000u)
#define REFERENCE_MV 5000u
#define RUN_CYCLES 1000u /* most that simavr runs in one go, its next timer permitting */
#define PAINT 0xA5u
#define TICK_VECTOR 14u /* TIMER0_COMPA */
#define FLAG_WATCHDOG (1u << 3) /* in MCUSR */

/* Addresses in data memory (data sheet, register summary). */
enum {
    DDR_B = 0x24, PORT_B = 0x25, DDR_D = 0x2A, PORT_D = 0x2B, MCUSR_ = 0x54,
    TCCR1A_ = 0x80, OCR1A_ = 0x88, OCR1B_ = 0x8A, TCCR2A_ = 0xB0, OCR2A_ = 0xB3, OCR2B_ = 0xB4,
    UCSR0A_ = 0xC0, UCSR0B_ = 0xC1, UBRR0L_ = 0xC4, UBRR0H_ = 0xC5
};

/* The pins of ports/atmega328p/board.h. */
enum { ENCODER_A = 4 /* D, and B is 5 */, FORWARD = 3 /* B */, REVERSE = 3 /* D */, ENABLE = 7 /* D */, SERVO0 = 1 /* B */, SERVO1 = 2 /* B */ };

static struct chip *the_chip; /* simavr's callbacks know nothing but their avr_t: one chip a program */

static void no_sleep(avr_t *avr, avr_cycle_count_t how_long)
{
    (void)avr;
    (void)how_long;
}

static void no_log(avr_t *avr, const int level, const char *format, va_list arguments)
{
    (void)avr;
    if (level <= 1) { /* errors */
        vfprintf(stderr, format, arguments);
    }
}

/* Called by simavr in the middle of every reset, the watchdog's too. */
static void on_reset(avr_t *avr)
{
    if (the_chip->reset_of_chip != NULL) {
        the_chip->reset_of_chip(avr);
    }
    the_chip->was_reset = true;
}

/* After a reset: it has wiped what was set up outside the chip's own registers. */
static void set_up_again(struct chip *chip)
{
    avr_t *avr = chip->avr;
    uint32_t flags = 0; /* neither to the console nor asleep on polling */
    chip->was_reset = false;
    chip->resets++;
    chip->ticks = 0;
    avr->data[MCUSR_] = chip->reset_flags;
    chip->reset_flags = FLAG_WATCHDOG; /* the next one, if nobody else asks for it */
    avr_ioctl(avr, AVR_IOCTL_UART_SET_FLAGS('0'), &flags);
    avr_extint_set_strict_lvl_trig(avr, 0, 0); /* else the pins of INT0 and INT1 are polled in every cycle */
    avr_extint_set_strict_lvl_trig(avr, 1, 0);
    for (uint32_t at = chip->memory_end; chip->memory_end != 0 && at <= avr->ramend; at++) {
        avr->data[at] = PAINT;
    }
}

/* The address of a variable by its name, which link-time optimisation may have given an ending; 0 where there is none. */
static uint16_t address_of(const elf_firmware_t *program, const char *name)
{
    size_t length = strlen(name);
    for (uint32_t i = 0; i < program->symbolcount; i++) {
        const char *symbol = program->symbol[i]->symbol;
        if (strncmp(symbol, name, length) == 0 && (symbol[length] == '\0' || symbol[length] == '.')) {
            return (uint16_t)program->symbol[i]->addr;
        }
    }
    return 0;
}

static void on_tick(avr_irq_t *irq, uint32_t value, void *param)
{
    struct chip *chip = param;
    (void)irq;
    if (value != 0) {
        chip->ticks++;
        chip->tick_cycle = chip->avr->cycle;
    }
}

static void find_pins(struct chip *chip)
{
    avr_t *avr = chip->avr;
    avr_irq_register_notify(avr_get_interrupt_irq(avr, TICK_VECTOR) + AVR_INT_IRQ_RUNNING, on_tick, chip);
    chip->encoder_a = avr_io_getirq(avr, AVR_IOCTL_IOPORT_GETIRQ('D'), ENCODER_A);
    chip->encoder_b = avr_io_getirq(avr, AVR_IOCTL_IOPORT_GETIRQ('D'), ENCODER_A + 1);
    chip->current = avr_io_getirq(avr, AVR_IOCTL_ADC_GETIRQ, ADC_IRQ_ADC0);
    chip->supply = avr_io_getirq(avr, AVR_IOCTL_ADC_GETIRQ, ADC_IRQ_ADC1);
    for (avr_io_t *io = avr->io_port; io != NULL; io = io->next) {
        if (strcmp(io->kind, "uart") == 0) {
            chip->uart = (avr_uart_t *)(void *)io;
        }
    }
}

bool chip_load(struct chip *chip, const char *elf, const uint8_t *eeprom, uint32_t eeprom_bytes, uint8_t reset_flags)
{
    memset(chip, 0, sizeof *chip);
    elf_firmware_t *program = &chip->program;
    avr_global_logger_set(no_log);
    if (elf_read_firmware(elf, program) != 0) {
        fprintf(stderr, "emu: %s cannot be read as a program for the controller\n", elf);
        return false;
    }
    program->frequency = FREQUENCY;
    program->vcc = program->avcc = program->aref = REFERENCE_MV;
    chip->avr = avr_make_mcu_by_name("atmega328p");
    if (chip->avr == NULL) {
        fprintf(stderr, "emu: this simavr knows no atmega328p\n");
        return false;
    }
    avr_init(chip->avr);
    avr_load_firmware(chip->avr, program);
    chip->memory_end = address_of(program, "_end");
    chip->worst_at = address_of(program, "worst_steps"); /* tick.c */
    chip->avr->sleep = no_sleep;
    find_pins(chip);
    if (eeprom != NULL) {
        uint8_t *copy = malloc(eeprom_bytes);
        if (copy == NULL) {
            return false;
        }
        memcpy(copy, eeprom, eeprom_bytes);
        avr_eeprom_desc_t image = {copy, 0, eeprom_bytes};
        avr_ioctl(chip->avr, AVR_IOCTL_EEPROM_SET, &image);
        free(copy);
    }
    the_chip = chip;
    chip->reset_of_chip = chip->avr->reset;
    chip->avr->reset = on_reset;
    chip_reset(chip, reset_flags);
    return chip->uart != NULL;
}

void chip_run(struct chip *chip, uint64_t until_cycle)
{
    avr_t *avr = chip->avr;
    uint32_t wanted = chip_byte_cycles(chip);
    if (wanted != 0) {
        chip->uart->cycles_per_byte = wanted; /* simavr counts a parity bit that is not there */
    }
    avr->run_cycle_limit = RUN_CYCLES; /* each reset puts it back to 1 */
    while (!chip->crashed && avr->cycle < until_cycle) {
        if (avr->run_cycle_count > until_cycle - avr->cycle) {
            avr->run_cycle_count = until_cycle - avr->cycle;
        }
        int state = avr_run(avr);
        if (chip->was_reset) {
            set_up_again(chip);
            return;
        }
        chip->crashed = state == cpu_Done || state == cpu_Crashed;
    }
}

void chip_reset(struct chip *chip, uint8_t reset_flags)
{
    chip->reset_flags = reset_flags;
    avr_reset(chip->avr);
    set_up_again(chip);
}

uint32_t chip_byte_cycles(const struct chip *chip)
{
    const uint8_t *data = chip->avr->data;
    uint32_t divider = (uint32_t)(data[UBRR0L_] | (data[UBRR0H_] & 0x0Fu) << 8);
    uint32_t clocks = (data[UCSR0A_] & 1u << 1) != 0 ? 8u : 16u;
    bool is_on = (data[UCSR0B_] & 1u << 4) != 0;
    return is_on ? 10u * clocks * (divider + 1u) : 0;
}

static bool is_driven_high(const struct chip *chip, uint8_t ddr, uint8_t port, uint8_t bit)
{
    return (chip->avr->data[ddr] >> bit & 1u) != 0 && (chip->avr->data[port] >> bit & 1u) != 0;
}

void chip_outputs(const struct chip *chip, struct chip_outputs *outputs)
{
    const uint8_t *data = chip->avr->data;
    bool forward = (data[TCCR2A_] & 0xC0u) == 0x80u && (data[DDR_B] >> FORWARD & 1u) != 0;
    bool reverse = (data[TCCR2A_] & 0x30u) == 0x20u && (data[DDR_D] >> REVERSE & 1u) != 0;
    memset(outputs, 0, sizeof *outputs);
    outputs->enabled = is_driven_high(chip, DDR_D, PORT_D, ENABLE);
    outputs->both_driven = forward && reverse;
    if (outputs->enabled) {
        int32_t compare = forward ? data[OCR2A_] : reverse ? -(int32_t)data[OCR2B_] : 0;
        outputs->duty = (int16_t)(compare * 10000 / 255);
        outputs->brake = !forward && !reverse && is_driven_high(chip, DDR_B, PORT_B, FORWARD) &&
                         is_driven_high(chip, DDR_D, PORT_D, REVERSE);
    }
    if ((data[TCCR1A_] & 0xC0u) == 0x80u && (data[DDR_B] >> SERVO0 & 1u) != 0) {
        outputs->pulse_half_us[0] = (uint32_t)(data[OCR1A_] | data[OCR1A_ + 1] << 8) + 1u;
    }
    if ((data[TCCR1A_] & 0x30u) == 0x20u && (data[DDR_B] >> SERVO1 & 1u) != 0) {
        outputs->pulse_half_us[1] = (uint32_t)(data[OCR1B_] | data[OCR1B_ + 1] << 8) + 1u;
    }
}

void chip_set_encoder(const struct chip *chip, uint32_t count)
{
    uint32_t step = count & 3u; /* forward, (A, B) runs through 00, 10, 11, 01 */
    bool a = step == 1 || step == 2;
    bool b = step == 2 || step == 3;
    /* What the pins are driven by, or simavr has a write to the port put them at their pull-ups. */
    avr_ioport_external_t driven = {.name = 'D', .mask = 3u << ENCODER_A, .value = (a ? 1u : 0u) << ENCODER_A | (b ? 2u : 0u) << ENCODER_A};
    avr_ioctl(chip->avr, AVR_IOCTL_IOPORT_SET_EXTERNAL('D'), &driven);
    avr_raise_irq(chip->encoder_a, a);
    avr_raise_irq(chip->encoder_b, b);
}

/* The whole mV for which simavr gives the code that the chip gives for these uV: the chip's is V x 1024 / reference (data sheet,
 * "ADC conversion result"), at most 1023, simavr's V x 1023 / reference, both rounded down. */
static uint32_t converter_mv(uint32_t microvolts)
{
    uint32_t code = (uint32_t)(microvolts * UINT64_C(1024) / (REFERENCE_MV * 1000u));
    code = code > 1023u ? 1023u : code;
    return (code * REFERENCE_MV + 1022u) / 1023u;
}

void chip_set_current_pin(const struct chip *chip, uint32_t microvolts)
{
    avr_raise_irq(chip->current, converter_mv(microvolts));
}

void chip_set_supply_pin(const struct chip *chip, uint32_t microvolts)
{
    avr_raise_irq(chip->supply, converter_mv(microvolts));
}

uint32_t chip_take_worst_us(const struct chip *chip)
{
    uint8_t *data = chip->avr->data;
    if (chip->worst_at == 0) {
        return 0;
    }
    uint32_t steps = (uint32_t)(data[chip->worst_at] | data[chip->worst_at + 1] << 8);
    data[chip->worst_at] = 0;
    data[chip->worst_at + 1] = 0;
    return steps * 4u;
}

bool chip_set_variable(const struct chip *chip, const char *name, uint8_t bytes, uint32_t value)
{
    uint16_t at = address_of(&chip->program, name);
    if (at == 0 || bytes > sizeof value || at + bytes > chip->avr->ramend) {
        return false;
    }
    for (uint8_t i = 0; i < bytes; i++) {
        chip->avr->data[at + i] = (uint8_t)(value >> (8 * i));
    }
    return true;
}

uint16_t chip_stack_bytes(const struct chip *chip)
{
    uint32_t at = chip->memory_end;
    while (at <= chip->avr->ramend && chip->avr->data[at] == PAINT) {
        at++;
    }
    return (uint16_t)(chip->avr->ramend + 1u - at);
}
