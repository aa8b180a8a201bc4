/* The Mersenne Twister MT19937 (Matsumoto and Nishimura, ACM TOMACS 8 (1998)), drawn from as Python's `random.Random` does,
 * so that the same seed gives the C plant the same noise as the Python one. */
#ifndef RAMPRIG_PLANT_TWISTER_H
#define RAMPRIG_PLANT_TWISTER_H

#include <stdint.h>

#define TWISTER_WORDS 624

struct twister {
    uint32_t word[TWISTER_WORDS];
    uint16_t next;
};

/* As `random.Random(seed)`. */
void twister_seed(struct twister *twister, uint64_t seed);

/* As `getrandbits(bits)`, 1 to 32. */
uint32_t twister_bits(struct twister *twister, uint8_t bits);

/* As `getrandbits(64)`. */
uint64_t twister_bits64(struct twister *twister);

/* As `random()`: 0.0 up to, but not, 1.0. */
double twister_unit(struct twister *twister);

/* As `randrange(-1, 2)`. */
int8_t twister_jitter(struct twister *twister);

/* Fills a table as so many calls of `gauss(0.0, 1.0)`; `count` must be even. */
void twister_gauss(struct twister *twister, double *table, uint16_t count);

#endif
