/* A simulated board inside another program, as a shared library: for `ramprig`'s `core:` ports.
 *
 * Every function takes the handle that `library_new` returned. A library holds no state of its own, so that a program may
 * have several boards; each belongs to one thread at a time. This is the one place of the C parts that asks for memory. */
#include "../simulated/simulated.h"

#include <stdlib.h>
#include <string.h>

struct simulated *library_new(void)
{
    struct simulated *s = malloc(sizeof *s);
    if (s != NULL) {
        simulated_clear(s);
    }
    return s;
}

void library_free(struct simulated *s)
{
    free(s);
}

void library_identity(struct simulated *s, const char *firmware, const char *board, const char *serial)
{
    memset(s->firmware, 0, sizeof s->firmware);
    memset(s->board, 0, sizeof s->board);
    memset(s->serial, 0, sizeof s->serial);
    strncpy(s->firmware, firmware, RR_TOKEN_MAX);
    strncpy(s->board, board, RR_TOKEN_MAX);
    strncpy(s->serial, serial, RR_TOKEN_MAX);
}

int library_parameter(struct simulated *s, const char *name, double value)
{
    return plant_parameters_set(&s->parameters, name, value);
}

void library_preset(struct simulated *s, uint8_t number, uint8_t index, int32_t value)
{
    simulated_preset(s, number, index, value);
}

int library_start(struct simulated *s, uint64_t seed, uint32_t baud, uint32_t boot_ticks, int32_t brownout_mv)
{
    s->seed = seed;
    s->boot_ticks = boot_ticks;
    s->brownout_mv = brownout_mv;
    return simulated_start(s, baud);
}

uint32_t library_run(struct simulated *s, uint32_t ticks)
{
    return simulated_run(s, ticks);
}

/* What the last `library_run` sent. */
const char *library_take(struct simulated *s, uint32_t *length)
{
    return simulated_take(s, length);
}

uint64_t library_ticks(const struct simulated *s)
{
    return s->ticks;
}

void library_receive(struct simulated *s, const uint8_t *bytes, uint32_t length)
{
    simulated_receive(s, bytes, length);
}

void library_purge(struct simulated *s)
{
    simulated_purge(s);
}

void library_break(struct simulated *s)
{
    simulated_break(s);
}

void library_reset(struct simulated *s, uint8_t cause)
{
    simulated_reset(s, cause);
}

int library_fault(struct simulated *s, const char *name, uint8_t axis, double amount)
{
    return simulated_fault(s, name, axis, amount);
}

/* The store's bytes, and whether they have changed since the last call. */
uint8_t *library_store(struct simulated *s)
{
    return s->store;
}

uint32_t library_store_bytes(void)
{
    return RR_STORE_BYTES;
}

int library_took_stored(struct simulated *s)
{
    bool stored = s->stored;
    s->stored = false;
    return stored;
}
