/* The Mersenne Twister; see twister.h. */
#include "twister.h"

#include <math.h>

#define SHIFT 397u
#define TAU   6.283185307179586

static void seed_word(struct twister *twister, uint32_t seed)
{
    twister->word[0] = seed;
    for (uint32_t i = 1; i < TWISTER_WORDS; i++) {
        uint32_t before = twister->word[i - 1];
        twister->word[i] = 1812433253u * (before ^ (before >> 30)) + i;
    }
    twister->next = TWISTER_WORDS;
}

/* The authors' `init_by_array` (2002), with a key of one or two words. */
void twister_seed(struct twister *twister, uint64_t seed)
{
    const uint32_t key[2] = {(uint32_t)seed, (uint32_t)(seed >> 32)};
    uint32_t length = key[1] != 0 ? 2 : 1;
    uint32_t *word = twister->word;
    seed_word(twister, 19650218u);
    uint32_t i = 1;
    uint32_t j = 0;
    for (uint32_t k = TWISTER_WORDS; k > 0; k--) {
        word[i] = (word[i] ^ ((word[i - 1] ^ (word[i - 1] >> 30)) * 1664525u)) + key[j] + j;
        j = j + 1 < length ? j + 1 : 0;
        if (++i >= TWISTER_WORDS) {
            word[0] = word[TWISTER_WORDS - 1];
            i = 1;
        }
    }
    for (uint32_t k = TWISTER_WORDS - 1; k > 0; k--) {
        word[i] = (word[i] ^ ((word[i - 1] ^ (word[i - 1] >> 30)) * 1566083941u)) - i;
        if (++i >= TWISTER_WORDS) {
            word[0] = word[TWISTER_WORDS - 1];
            i = 1;
        }
    }
    word[0] = 0x80000000u;
}

static void twist(struct twister *twister)
{
    uint32_t *word = twister->word;
    for (uint32_t i = 0; i < TWISTER_WORDS; i++) {
        uint32_t mixed = (word[i] & 0x80000000u) | (word[(i + 1) % TWISTER_WORDS] & 0x7FFFFFFFu);
        word[i] = word[(i + SHIFT) % TWISTER_WORDS] ^ (mixed >> 1) ^ ((mixed & 1u) != 0 ? 0x9908B0DFu : 0u);
    }
    twister->next = 0;
}

uint32_t twister_bits(struct twister *twister, uint8_t bits)
{
    if (twister->next >= TWISTER_WORDS) {
        twist(twister);
    }
    uint32_t y = twister->word[twister->next++];
    y ^= y >> 11;
    y ^= (y << 7) & 0x9D2C5680u;
    y ^= (y << 15) & 0xEFC60000u;
    y ^= y >> 18;
    return y >> (32 - bits);
}

uint64_t twister_bits64(struct twister *twister)
{
    uint64_t low = twister_bits(twister, 32);
    return low | (uint64_t)twister_bits(twister, 32) << 32;
}

double twister_unit(struct twister *twister)
{
    uint32_t high = twister_bits(twister, 27);
    uint32_t low = twister_bits(twister, 26);
    return (high * 67108864.0 + low) * (1.0 / 9007199254740992.0);
}

int8_t twister_jitter(struct twister *twister)
{
    uint32_t drawn;
    do {
        drawn = twister_bits(twister, 2);
    } while (drawn > 2);
    return (int8_t)((int8_t)drawn - 1);
}

/* Two at a time, by the polar angle and radius of Box and Muller. */
void twister_gauss(struct twister *twister, double *table, uint16_t count)
{
    for (uint16_t i = 0; i + 1 < count; i = (uint16_t)(i + 2)) {
        double angle = twister_unit(twister) * TAU;
        double radius = sqrt(-2.0 * log(1.0 - twister_unit(twister)));
        table[i] = cos(angle) * radius;
        table[i + 1] = sin(angle) * radius;
    }
}
