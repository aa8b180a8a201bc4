/* The thermal model of one motor (SPEC TRIP-8): a first-order lag of the current's square, in the form of IEC 60255-149.
 *
 * Whole numbers of 32 bits and one step of shifts and additions: an 8-bit controller has no 64-bit multiplication worth its
 * program memory. Unsigned throughout; where a sum could pass its type, the comment beside it says why it does not. */
#ifndef RAMPRIG_HEAT_H
#define RAMPRIG_HEAT_H

#include <stdint.h>

struct rr_heat {
    uint32_t level;    /* floor(heat / 2^24), mA^2: at most 65535^2 */
    uint32_t part;     /* the rest of heat / 2^24, in 2^-32: its lower eight bits are 0 */
    uint32_t sum_low;  /* of the squares since the last step, mA^2: 40 bits, the lower 32 of them ... */
    uint8_t sum_high;  /* ... and the upper eight */
};

/* A tick's current by its size, of which 65535 mA count at most. At most RR_THERMAL_TICKS times between two steps. */
/*@ requires \valid(heat);
    assigns heat->sum_low, heat->sum_high;
*/
void rr_heat_take(struct rr_heat *heat, uint32_t size_ma);

/* The step of every RR_THERMAL_TICKS ticks: the level moves towards the squares' mean by gain / 2^24 of the way. */
/*@ requires \valid(heat) && gain < 0x1000000;
    assigns *heat;
    ensures heat->sum_low == 0 && heat->sum_high == 0;
*/
void rr_heat_step(struct rr_heat *heat, uint32_t gain);

/* The whole root. */
/*@ assigns \nothing;
    ensures \result * \result <= square;
*/
uint16_t rr_heat_root(uint32_t square);

#endif
