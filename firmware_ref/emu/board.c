/* The emulated board as a whole; see board.h. */
#include "board.h"

#include <simavr/avr_uart.h>

#include <inttypes.h>
#include <stdio.h>
#include <string.h>

#define SLICE_CYCLES (50u * CYCLES_A_US)

enum { FLAG_POWER = 1u << 0, FLAG_EXTERNAL = 1u << 1, FLAG_BROWNOUT = 1u << 2, FLAG_WATCHDOG = 1u << 3 };

bool board_begin(struct board *board, const char *elf, const uint8_t *eeprom, uint32_t eeprom_bytes, uint8_t reset_flags,
                 const struct plant_parameters *plant, uint64_t seed)
{
    memset(board, 0, sizeof *board);
    if (!chip_load(&board->chip, elf, eeprom, eeprom_bytes, reset_flags)) {
        return false;
    }
    wire_begin(&board->wire, &board->chip);
    if (!bench_begin(&board->bench, &board->chip, plant, seed)) {
        fprintf(stderr, "emu: the plant has other motors and servos than the board (1 and at most %u), or cannot be\n", CHIP_SERVOS);
        return false;
    }
    board->resets_seen = board->chip.resets;
    return true;
}

static void look_for_reset(struct board *board)
{
    if (board->chip.resets != board->resets_seen) {
        board->resets_seen = board->chip.resets;
        wire_after_reset(&board->wire);
        bench_after_reset(&board->bench);
    }
}

void board_run(struct board *board, uint32_t advance_us, bool until_line)
{
    uint64_t end_us = board->now_us + advance_us;
    uint64_t end = end_us * CYCLES_A_US;
    while (!board->chip.crashed && board->chip.avr->cycle < end && !(until_line && board->wire.line_ended)) {
        uint64_t slice_end = board->chip.avr->cycle + SLICE_CYCLES;
        chip_run(&board->chip, slice_end < end ? slice_end : end);
        look_for_reset(board);
    }
    uint64_t reached_us = board->chip.avr->cycle / CYCLES_A_US;
    board->now_us = board->wire.line_ended && until_line && reached_us < end_us ? reached_us : end_us;
    if (board->chip.avr->cycle < board->now_us * CYCLES_A_US && !board->chip.crashed) {
        chip_run(&board->chip, board->now_us * CYCLES_A_US);
    }
}

uint8_t board_reset_flags(const char *cause)
{
    static const struct {
        const char *name;
        uint8_t flags;
    } causes[] = {
        {"power", FLAG_POWER | FLAG_BROWNOUT}, {"external", FLAG_EXTERNAL}, {"brownout", FLAG_BROWNOUT}, {"watchdog", FLAG_WATCHDOG}};
    for (size_t i = 0; i < sizeof causes / sizeof causes[0]; i++) {
        if (strcmp(cause, causes[i].name) == 0) {
            return causes[i].flags;
        }
    }
    return 0;
}

static void probe(const struct board *board, char *answer, size_t room)
{
    struct chip_outputs outputs;
    chip_outputs(&board->chip, &outputs);
    snprintf(answer, room,
             "cycle=%" PRIu64 " stack=%u lost=%" PRIu64 " resets=%" PRIu64 " crashed=%d enabled=%d duty=%d brake=%d"
             " pulse0_half_us=%u pulse1_half_us=%u both=%d counts=%d off_us=%" PRIu64 " marked=%d worst_us=%u"
             " ticks=%" PRIu64 " tick_cycle=%" PRIu64,
             (uint64_t)board->chip.avr->cycle, chip_stack_bytes(&board->chip), board->wire.lost, board->chip.resets,
             board->chip.crashed, outputs.enabled, outputs.duty, outputs.brake, outputs.pulse_half_us[0],
             outputs.pulse_half_us[1], board->bench.was_driven_twice, (int32_t)board->bench.counts,
             board->bench.worst_off_cycles / CYCLES_A_US, board->bench.marked, chip_take_worst_us(&board->chip),
             board->chip.ticks, board->chip.tick_cycle);
}

void board_command(struct board *board, const char *command, char *answer, size_t room)
{
    char name[64];
    unsigned number;
    int counts_per_s;
    int current_ma;
    int64_t value;
    double amount;
    snprintf(answer, room, "ok");
    if (strcmp(command, "break") == 0) {
        wire_put_symbol(&board->wire, UART_INPUT_FE);
    } else if (sscanf(command, "framing %u", &number) == 1 && number < 256) {
        wire_put_symbol(&board->wire, (uint16_t)(UART_INPUT_FE | number));
    } else if (sscanf(command, "noise %u", &number) == 1) {
        board->wire.noise = number;
    } else if (sscanf(command, "lost_encoder %u", &number) == 1) {
        board->bench.lost_encoder = number != 0;
    } else if (sscanf(command, "reset %63s", name) == 1 && board_reset_flags(name) != 0) {
        chip_reset(&board->chip, board_reset_flags(name));
        look_for_reset(board);
    } else if (sscanf(command, "script %d %d %u", &counts_per_s, &current_ma, &number) == 3) {
        bench_script(&board->bench, counts_per_s, current_ma, number);
    } else if (sscanf(command, "fault %63s %lf", name, &amount) == 2) {
        if (!plant_set_fault(&board->bench.plant, name, 0, amount)) {
            snprintf(answer, room, "? the plant has no fault %s", name);
        }
    } else if (sscanf(command, "set %63s %u %" SCNd64, name, &number, &value) == 3) {
        if (number > 4 || !chip_set_variable(&board->chip, name, (uint8_t)number, (uint32_t)value)) {
            snprintf(answer, room, "? the program has no variable %s of %u bytes", name, number);
        }
    } else if (strcmp(command, "mark") == 0) {
        bench_mark(&board->bench);
    } else if (strcmp(command, "probe") == 0) {
        probe(board, answer, room);
    } else {
        snprintf(answer, room, "? %s", command);
    }
}
