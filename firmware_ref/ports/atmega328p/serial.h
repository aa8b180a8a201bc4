/* The UART: rings both ways, BREAK and overruns below the line parser. */
#ifndef ATMEGA328P_SERIAL_H
#define ATMEGA328P_SERIAL_H

#include <stdbool.h>
#include <stdint.h>

void serial_begin(void);

/* True where no received byte waits. */
bool serial_is_quiet(void);

/* The next received byte, or -1. */
int serial_read(void);

/* Bytes that can be queued. */
uint8_t serial_room(void);

/* Queues a byte; there must be room. */
void serial_write(uint8_t byte);

/* True once after a BREAK. To be called every tick: it counts what was lost, too. */
bool serial_took_break(void);

/* Bytes lost, since start. */
uint32_t serial_overruns(void);

#endif
