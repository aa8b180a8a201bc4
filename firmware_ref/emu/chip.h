/* The emulated ATmega328P: its program, its pins by their registers, its clock, resets and probes.
 *
 * This program is linked with simavr, which is under the GPL, version 3 or later: as a whole it is under that licence too. It is
 * a test program of its own, loaded by nothing else of the project and no part of its wheel. The file itself is the project's.
 */
#ifndef EMU_CHIP_H
#define EMU_CHIP_H

#include <simavr/avr_uart.h>
#include <simavr/sim_avr.h>
#include <simavr/sim_elf.h>

#include <stdbool.h>
#include <stdint.h>

#define CYCLES_A_US 16u
#define CHIP_SERVOS 2u

struct chip {
    avr_t *avr;
    avr_uart_t *uart;
    avr_irq_t *encoder_a;
    avr_irq_t *encoder_b;
    avr_irq_t *current;
    avr_irq_t *supply;
    elf_firmware_t program; /* its symbols */
    uint16_t worst_at;    /* address of the program's own worst tick, 0 = unknown */
    uint16_t memory_end;  /* first address the stack may not reach: the program's own memory lies below */
    uint8_t reset_flags;  /* MCUSR at the next start */
    bool crashed;
    bool was_reset;
    void (*reset_of_chip)(struct avr_t *avr);
    uint64_t resets;
    uint64_t ticks;      /* interrupts of the program's tick since the last reset */
    uint64_t tick_cycle; /* when the last one came */
};

/* What the outputs do, read from the registers behind the pins. */
struct chip_outputs {
    int16_t duty;  /* at the bridge, 1/10000, by the compare registers; 0 where the driver is not enabled */
    bool brake;
    bool enabled;
    bool both_driven; /* both inputs are on PWM: must never be */
    uint32_t pulse_half_us[CHIP_SERVOS];
};

/* Loads a program. `eeprom` may be NULL, else `eeprom_bytes` of it. False, told on stderr, where it cannot be loaded. */
bool chip_load(struct chip *chip, const char *elf, const uint8_t *eeprom, uint32_t eeprom_bytes, uint8_t reset_flags);

/* Runs until this cycle, or a little beyond it. In slices of at most 100 us, or the UART's pace is set too late. */
void chip_run(struct chip *chip, uint64_t until_cycle);

/* Resets as by the bits of MCUSR. */
void chip_reset(struct chip *chip, uint8_t reset_flags);

void chip_outputs(const struct chip *chip, struct chip_outputs *outputs);

/* Sets the encoder's pins by a count of quadrature steps. */
void chip_set_encoder(const struct chip *chip, uint32_t count);

/* Sets the analog inputs in uV at the pins. */
void chip_set_current_pin(const struct chip *chip, uint32_t microvolts);
void chip_set_supply_pin(const struct chip *chip, uint32_t microvolts);

/* Cycles of a byte on the wire, by the UART's registers; 0 before it is set up. */
uint32_t chip_byte_cycles(const struct chip *chip);

/* The worst time of a tick by the program's own measure in us, since the last call; 0 where it has none. */
uint32_t chip_take_worst_us(const struct chip *chip);

/* Writes the low `bytes` bytes of a value into a variable of the program, 1 to 4. False where there is none of the name. */
bool chip_set_variable(const struct chip *chip, const char *name, uint8_t bytes, uint32_t value);

/* The deepest the stack has been since the start, in bytes. */
uint16_t chip_stack_bytes(const struct chip *chip);

#endif
