/* The store in EEPROM: read at once, written byte by byte in the background. */
#ifndef ATMEGA328P_KEEPING_H
#define ATMEGA328P_KEEPING_H

#include <stdbool.h>
#include <stdint.h>

/* Waits for a write that a reset has left running, at most 3.4 ms. */
void keeping_begin(void);

/* False, nothing done, while a write goes on. */
bool keeping_load(uint16_t offset, uint8_t *bytes, uint8_t length);

/* Begins to write up to seven bytes, which are copied; or goes on with a write that ends where this one begins, as long as
 * both are seven at most. False, nothing done, while another write goes on. Bytes are written in order. */
bool keeping_store(uint16_t offset, const uint8_t *bytes, uint8_t length);

#endif
