/* Numbers kept in memory as narrow as their range allows, read and written by their address and width. */
#ifndef RAMPRIG_KEPT_H
#define RAMPRIG_KEPT_H

#include "config.h"

#include <stdint.h>

enum rr_width {
    RR_I8,
    RR_U8,
    RR_I16,
    RR_U16,
    RR_I32,
    RR_NS,      /* an rr_ns */
    RR_US_AS_NS /* us, kept as an rr_ns */
};

int32_t rr_kept_read(const void *kept, uint8_t width);

/* The value must be in the width's range. */
void rr_kept_write(void *kept, uint8_t width, int32_t value);

/* Counts one more, over the wrap. */
void rr_kept_count(uint32_t *counter);

#endif
