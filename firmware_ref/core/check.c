/* The two checks; see check.h. */
#include "check.h"

#include "config.h"

/* By shifts of the whole byte: no table in flash, no loop over bits. x^16 + x^12 + x^5 + 1. */
uint16_t rr_crc16(uint16_t crc, uint8_t byte)
{
    uint8_t x = (uint8_t)((crc >> 8) ^ byte);
    x ^= (uint8_t)(x >> 4);
    return (uint16_t)((uint16_t)(crc << 8) ^ (uint16_t)((uint16_t)x << 12) ^ (uint16_t)((uint16_t)x << 5) ^ x);
}

/* The register after four bits of each value: by half bytes, a small table for a controller without a barrel shifter. */
static const RR_FLASH uint32_t after_four[16] = {
    0x00000000ul, 0x1DB71064ul, 0x3B6E20C8ul, 0x26D930ACul, 0x76DC4190ul, 0x6B6B51F4ul, 0x4DB26158ul, 0x5005713Cul,
    0xEDB88320ul, 0xF00F9344ul, 0xD6D6A3E8ul, 0xCB61B38Cul, 0x9B64C2B0ul, 0x86D3D2D4ul, 0xA00AE278ul, 0xBDBDF21Cul,
};

uint32_t rr_crc32(uint32_t crc, uint8_t byte)
{
    crc ^= byte;
    crc = (crc >> 4) ^ after_four[crc & 0xFu];
    return (crc >> 4) ^ after_four[crc & 0xFu];
}
