/* Numbers kept as narrow as their range allows; see kept.h. */
#include "kept.h"

#include "servo.h"

int32_t rr_kept_read(const void *kept, uint8_t width)
{
    switch (width) {
    case RR_I8:
        return *(const int8_t *)kept;
    case RR_U8:
        return *(const uint8_t *)kept;
    case RR_I16:
        return *(const int16_t *)kept;
    case RR_U16:
        return *(const uint16_t *)kept;
    case RR_NS:
        return *(const rr_ns *)kept;
    case RR_US_AS_NS:
        return rr_servo_us(*(const rr_ns *)kept);
    default:
        return *(const int32_t *)kept;
    }
}

void rr_kept_write(void *kept, uint8_t width, int32_t value)
{
    switch (width) {
    case RR_I8:
    case RR_U8:
        *(uint8_t *)kept = (uint8_t)value;
        break;
    case RR_I16:
    case RR_U16:
        *(uint16_t *)kept = (uint16_t)value;
        break;
    case RR_US_AS_NS:
        *(rr_ns *)kept = (rr_ns)((rr_ns)value * 1000);
        break;
    case RR_NS:
        *(rr_ns *)kept = (rr_ns)value;
        break;
    default:
        *(int32_t *)kept = value;
        break;
    }
}

RR_APART void rr_kept_count(uint32_t *counter)
{
    ++*counter;
}
