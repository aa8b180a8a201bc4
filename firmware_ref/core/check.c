/* The two checks; see check.h. */
#include "check.h"

#include <stdbool.h>

/* By shifts of the whole byte: no table in flash, no loop over bits. x^16 + x^12 + x^5 + 1. */
uint16_t rr_crc16(uint16_t crc, uint8_t byte)
{
    uint8_t x = (uint8_t)((crc >> 8) ^ byte);
    x ^= (uint8_t)(x >> 4);
    return (uint16_t)((uint16_t)(crc << 8) ^ (uint16_t)((uint16_t)x << 12) ^ (uint16_t)((uint16_t)x << 5) ^ x);
}

/* Bit by bit, without a table: it is in no hurry. The polynomial 0x04C11DB7, reflected. */
uint32_t rr_crc32(uint32_t crc, uint8_t byte)
{
    crc ^= byte;
    for (uint8_t bit = 0; bit < 8; bit++) {
        bool one = (crc & 1u) != 0;
        crc >>= 1;
        if (one) {
            crc ^= 0xEDB88320ul;
        }
    }
    return crc;
}
