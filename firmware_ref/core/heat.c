/* The thermal model of one motor; see heat.h. */
#include "heat.h"

#include "config.h"

#include "seeded.h"

void rr_heat_take(struct rr_heat *heat, uint32_t size_ma)
{
    uint16_t u = size_ma > 65535ul ? 65535u : (uint16_t)size_ma;
    //@ assert u <= 65535 && u * u <= 0xFFFE0001;
    uint32_t square = RR_SEEDED(SQUARE_IN_INT, (uint32_t)((int)u * (int)u), (uint32_t)u * u);
    heat->sum_low += square;
    if (heat->sum_low < square) {
        heat->sum_high++; /* 64 squares of 16 bits take 38 */
    }
}

/* gap x gain / 2^24: its whole part is returned, the rest is `part` in 2^-32. By halves of 16 bits, as in writing. */
/*@ requires \valid(part);
    assigns *part; */
RR_APART static uint32_t product(uint32_t gap, uint32_t gain, uint32_t *part)
{
    uint16_t gap_high = (uint16_t)(gap >> 16);
    uint16_t gain_high = (uint16_t)(gain >> 16);
    uint32_t low = (uint32_t)(uint16_t)gap * (uint16_t)gain;
    uint32_t middle = (low >> 16) + (uint32_t)gap_high * (uint16_t)gain; /* at most 65535 + 65535^2 */
    uint32_t more = (uint32_t)(uint16_t)gap * gain_high;
    middle += more;
    *part = middle << 24 | (low & 0xFFFFu) << 8;
    return (middle >> 8) + ((uint32_t)gap_high * gain_high << 8) + (middle < more ? (uint32_t)1 << 24 : 0u);
}

void rr_heat_step(struct rr_heat *heat, uint32_t gain)
{
    uint32_t mean = (uint32_t)(uint8_t)(heat->sum_high * 4u) << 24 | heat->sum_low >> 6;
    uint32_t part;
    uint32_t whole = product(mean - heat->level, gain, &part);
    if (mean < heat->level) { /* the way is less than 0: as an unsigned number it was 2^32 too long */
        whole -= gain << 8;
    }
    heat->sum_low = 0;
    heat->sum_high = 0;
    heat->part += part;
    heat->level += whole + (heat->part < part ? 1u : 0u); /* not past the mean: the gain is below 1 */
}
_Static_assert(RR_THERMAL_TICKS == 64, "rr_heat_step divides by it with shifts of 6 and 32 - 6");

uint16_t rr_heat_root(uint32_t square)
{
    uint16_t root = 0;
    /*@ loop invariant 0 <= root <= 65535 && root + 2 * bit <= 65536 && root * root <= square;
        loop assigns bit, root;
        loop variant bit; */
    for (uint16_t bit = 0x8000u; bit != 0; bit >>= 1) {
        uint16_t tried = (uint16_t)(root + bit);
        if ((uint32_t)tried * tried <= square) {
            root = tried;
        }
    }
    return root;
}
