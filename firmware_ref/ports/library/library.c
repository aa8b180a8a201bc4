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

/* Where the bytes lie that the last run has sent. */
const char *library_sent(struct simulated *s)
{
    return s->wire.sent;
}

/* How many ticks have passed, and above them, from bit 32 on, how many bytes were sent: one call does for a host's turn. */
static uint64_t library_passed(const struct simulated *s, uint32_t ticks)
{
    return (uint64_t)s->wire.sent_count << 32 | ticks;
}

uint64_t library_run(struct simulated *s, uint32_t ticks, int patient)
{
    uint32_t taken;
    (void)simulated_take(s, &taken);
    return library_passed(s, simulated_run(s, ticks, patient != 0));
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

/* ---- the watch: what the plant truly does, which no sensor tells ------------------------------------------------------ */

#define WATCH_HOLD_MAX 64u /* longest time, in ticks, over which a current counts as lasting */
#define WATCH_BUS      3u  /* columns of a row: highest and lowest bus voltage in V, energy given by the supply in J */
#define WATCH_AXIS     6u  /* and for each axis: greatest current and greatest lasting current in A, greatest speed in
                              rad/s, mean square of the current in A^2, mean duty (1 = full), winding in degC at the end */

/* Gathers a row of doubles every `every` ticks; `hold[n]` is how many ticks in a row a current of axis n must last. */
struct library_watch {
    uint32_t every;
    uint32_t capacity; /* rows */
    uint32_t rows;
    uint32_t ticks; /* in the row being filled */
    uint32_t hold[PLANT_AXES_MAX];
    uint32_t place;
    double recent[PLANT_AXES_MAX][WATCH_HOLD_MAX];
    double row[WATCH_BUS + WATCH_AXIS * PLANT_AXES_MAX];
    double *table;
};

void library_watch_free(struct library_watch *watch)
{
    if (watch != NULL) {
        free(watch->table);
        free(watch);
    }
}

struct library_watch *library_watch_new(uint32_t every, uint32_t capacity)
{
    struct library_watch *watch = calloc(1, sizeof *watch);
    if (watch == NULL) {
        return NULL;
    }
    watch->every = every;
    watch->capacity = capacity;
    for (uint32_t i = 0; i < PLANT_AXES_MAX; i++) {
        watch->hold[i] = 1;
    }
    watch->table = calloc((size_t)capacity * (WATCH_BUS + WATCH_AXIS * PLANT_AXES_MAX), sizeof *watch->table);
    if (watch->table == NULL) {
        free(watch);
        return NULL;
    }
    return watch;
}

void library_watch_hold(struct library_watch *watch, uint32_t axis, uint32_t ticks)
{
    watch->hold[axis] = ticks < 1 ? 1 : ticks > WATCH_HOLD_MAX ? WATCH_HOLD_MAX : ticks;
}

/* The rows gathered since the last call, `*rows` of them, one after the other without gaps. */
const double *library_watch_take(struct library_watch *watch, uint32_t *rows)
{
    *rows = watch->rows;
    watch->rows = 0;
    return watch->table;
}

static double watch_lasting(const struct library_watch *watch, uint32_t axis)
{
    double least = watch->recent[axis][watch->place];
    for (uint32_t back = 1; back < watch->hold[axis]; back++) {
        double then = watch->recent[axis][(watch->place + WATCH_HOLD_MAX - back) % WATCH_HOLD_MAX];
        least = then < least ? then : least;
    }
    return least;
}

static double larger(double a, double b)
{
    return a > b ? a : b;
}

static void watch_tick(struct library_watch *watch, const struct simulated *s)
{
    const struct plant *plant = &s->plant;
    bool first = watch->ticks == 0;
    double *row = watch->row;
    double bus_v = plant->supply.bus_v;
    row[0] = first ? bus_v : larger(row[0], bus_v);
    row[1] = first || bus_v < row[1] ? bus_v : row[1];
    row[2] = (first ? 0.0 : row[2]) + bus_v * plant->supply.current_a * (RR_TICK_US * 1e-6);
    watch->place = (watch->place + 1) % WATCH_HOLD_MAX;
    for (uint32_t i = 0; i < plant->parameters.axes; i++) {
        const struct plant_axis *axis = &plant->axis[i];
        double *part = row + WATCH_BUS + WATCH_AXIS * i;
        double size_a = axis->current_a < 0.0 ? -axis->current_a : axis->current_a;
        double speed = axis->speed_rad_s < 0.0 ? -axis->speed_rad_s : axis->speed_rad_s;
        watch->recent[i][watch->place] = size_a;
        part[0] = first ? size_a : larger(part[0], size_a);
        part[1] = first ? watch_lasting(watch, i) : larger(part[1], watch_lasting(watch, i));
        part[2] = first ? speed : larger(part[2], speed);
        part[3] = (first ? 0.0 : part[3]) + size_a * size_a / watch->every;
        part[4] = (first ? 0.0 : part[4]) + axis->duty / (double)PLANT_DUTY_FULL / watch->every;
        part[5] = axis->winding_c;
    }
    if (++watch->ticks < watch->every) {
        return;
    }
    watch->ticks = 0;
    if (watch->rows < watch->capacity) {
        uint32_t columns = WATCH_BUS + WATCH_AXIS * plant->parameters.axes;
        memcpy(watch->table + (size_t)watch->rows * columns, row, columns * sizeof *row);
        watch->rows++;
    }
}

/* As `library_run`, with every tick watched; runs no further than the watch's table has room. */
uint64_t library_run_watched(struct simulated *s, uint32_t ticks, int patient, struct library_watch *watch)
{
    uint32_t taken;
    uint32_t passed = 0;
    (void)simulated_take(s, &taken);
    while (passed < ticks && watch->rows < watch->capacity && simulated_run(s, 1, patient != 0) != 0) {
        passed++;
        watch_tick(watch, s);
    }
    return library_passed(s, passed);
}

/* The winding of an axis at a temperature, as after hours of running. */
void library_set_winding(struct simulated *s, uint8_t axis, double celsius)
{
    s->plant.axis[axis].winding_c = celsius;
}
