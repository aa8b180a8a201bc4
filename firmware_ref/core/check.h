/* The two checks of the protocol: CRC-16 of a line's body (SPEC CHECK-1), CRC-32 of the limits (SPEC LIMIT-5). */
#ifndef RAMPRIG_CHECK_H
#define RAMPRIG_CHECK_H

#include <stdint.h>

#define RR_CRC16_START 0xFFFFu
#define RR_CRC32_START 0xFFFFFFFFul

/* The CRC-16/IBM-3740 register after one more byte; the register is the check, there is no final step. */
uint16_t rr_crc16(uint16_t crc, uint8_t byte);

/* The CRC-32/ISO-HDLC register after one more byte; the check is the register's complement. */
uint32_t rr_crc32(uint32_t crc, uint8_t byte);

#endif
