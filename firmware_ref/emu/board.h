/* The emulated board as a whole, and what a test may tell it or ask it; see chip.h for the licence. */
#ifndef EMU_BOARD_H
#define EMU_BOARD_H

#include "bench.h"
#include "chip.h"
#include "wire.h"

#include <stddef.h>

struct board {
    struct chip chip;
    struct wire wire;
    struct bench bench;
    uint64_t resets_seen;
    uint64_t now_us; /* as told to the host */
};

/* The bits of MCUSR for a reset's cause by name, 0 where there is none. */
uint8_t board_reset_flags(const char *cause);

/* Starts a board with this program and plant. False, told on stderr, where it cannot. */
bool board_begin(struct board *board, const char *elf, const uint8_t *eeprom, uint32_t eeprom_bytes, uint8_t reset_flags,
                 const struct plant_parameters *plant, uint64_t seed);

/* Runs for at most so long; ends early with the LF of a line of the chip where `until_line`. */
void board_run(struct board *board, uint32_t advance_us, bool until_line);

/* Carries out a command, and writes its answer as one line of text:
 *   break | framing BYTE | noise ONE_IN | lost_encoder 0|1
 *   reset power|external|brownout|watchdog
 *   script COUNTS_PER_S CURRENT_MA SUPPLY_MV | fault NAME AMOUNT   (of the plant)
 *   set NAME BYTES VALUE  writes a variable of the program
 *   mark                  begins to time until the bridge is off
 *   probe                 what the outputs do, the stack's depth and more, as `name=value` fields; `worst_us` since the last
 * An unknown or wrong command answers `? ...`. */
void board_command(struct board *board, const char *command, char *answer, size_t room);

#endif
