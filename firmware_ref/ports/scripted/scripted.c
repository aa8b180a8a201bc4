/* The core as a shared library behind scripted inputs: what a test sets is what the core reads, and what the core writes
 * is handed over as bytes. It has no clock, no plant and no hardware; a test calls one function a tick. */
#include "../../core/device.h"
#include "../../core/store.h"

#include <stdlib.h>
#include <string.h>

#define IN_BYTES  65536u
#define OUT_BYTES (1u << 20)

struct scripted {
    struct rr_device device;
    struct rr_port port;
    struct rr_inputs inputs;
    uint8_t store[RR_STORE_BYTES];
    uint32_t store_writes_left; /* bytes until the power goes; UINT32_MAX = never */
    uint8_t store_spoils;       /* bits of the byte then under way that turn round */
    int16_t duty[RR_AXES];
    bool brake[RR_AXES];
    uint32_t pulse_ns[RR_SERVOS > 0 ? RR_SERVOS : 1];
    bool broke;
    uint8_t in[IN_BYTES];
    uint32_t in_first;
    uint32_t in_count;
    char out[OUT_BYTES];
    uint32_t out_count;
    char names[3][RR_TOKEN_MAX + 1];
};

static int read_byte(void *self)
{
    struct scripted *s = self;
    if (s->in_count == 0) {
        return -1;
    }
    s->in_count--;
    return s->in[s->in_first++];
}

static uint16_t room(void *self)
{
    const struct scripted *s = self;
    uint32_t left = OUT_BYTES - s->out_count;
    return left > UINT16_MAX ? UINT16_MAX : (uint16_t)left;
}

static void write_bytes(void *self, const char *bytes, uint8_t length)
{
    struct scripted *s = self;
    memcpy(s->out + s->out_count, bytes, length);
    s->out_count += length;
}

static bool took_break(void *self)
{
    struct scripted *s = self;
    bool broke = s->broke;
    s->broke = false;
    return broke;
}

static uint32_t nothing(void *self)
{
    (void)self;
    return 0;
}

static void inputs(void *self, struct rr_inputs *read)
{
    *read = ((const struct scripted *)self)->inputs;
}

static void bridge(void *self, uint8_t axis, int16_t duty, bool brake)
{
    struct scripted *s = self;
    s->duty[axis] = duty;
    s->brake[axis] = brake;
}

static void pulse(void *self, uint8_t servo, uint32_t pulse_ns)
{
    ((struct scripted *)self)->pulse_ns[servo] = pulse_ns;
}

static void off(void *self)
{
    struct scripted *s = self;
    memset(s->duty, 0, sizeof s->duty);
    memset(s->brake, 0, sizeof s->brake);
    memset(s->pulse_ns, 0, sizeof s->pulse_ns);
}

static bool load(void *self, uint16_t offset, void *bytes, uint16_t length)
{
    memcpy(bytes, ((const struct scripted *)self)->store + offset, length);
    return true;
}

static bool store(void *self, uint16_t offset, const void *bytes, uint16_t length)
{
    struct scripted *s = self;
    for (uint16_t i = 0; i < length; i++) {
        if (s->store_writes_left == 0) {
            s->store[offset + i] ^= s->store_spoils;
            s->store_spoils = 0;
            break;
        }
        s->store[offset + i] = ((const uint8_t *)bytes)[i];
        if (s->store_writes_left != UINT32_MAX) {
            s->store_writes_left--;
        }
    }
    return true;
}

struct scripted *scripted_new(const char *firmware, const char *board, const char *serial)
{
    struct scripted *s = calloc(1, sizeof *s);
    if (s == NULL) {
        return NULL;
    }
    strncpy(s->names[0], firmware, RR_TOKEN_MAX);
    strncpy(s->names[1], board, RR_TOKEN_MAX);
    strncpy(s->names[2], serial, RR_TOKEN_MAX);
    struct rr_port port = {read_byte, room,  write_bytes, took_break, nothing,     inputs,     bridge,    pulse,
                           off,       load,  store,       nothing,    s->names[0], s->names[1], s->names[2]};
    s->port = port;
    s->store_writes_left = UINT32_MAX;
    memset(s->store, 0xFF, sizeof s->store);
    return s;
}

void scripted_free(struct scripted *s)
{
    free(s);
}

/* Puts a value into the store as if it had been set before this start. */
void scripted_preset(struct scripted *s, uint8_t number, uint8_t index, int32_t value)
{
    uint8_t slot = number == 0 ? RR_SLOT_BOOT : (uint8_t)(1u + rr_limits_place(number, index));
    (void)rr_store_write(&s->port, s, slot, value);
}

/* The power goes after so many more bytes written to the store. */
void scripted_cut_store_after(struct scripted *s, uint32_t bytes)
{
    s->store_writes_left = bytes;
}

/* ... and the byte that is then under way is spoilt: these bits of it turn round. */
void scripted_tear(struct scripted *s, uint8_t bits)
{
    s->store_spoils = bits;
}

uint8_t *scripted_store(struct scripted *s, uint32_t *length)
{
    *length = RR_STORE_BYTES;
    return s->store;
}

void scripted_start(struct scripted *s, uint8_t cause, int32_t fault)
{
    s->in_count = 0;
    rr_device_start(&s->device, &s->port, s, cause, fault);
}

void scripted_feed(struct scripted *s, const uint8_t *bytes, uint32_t length)
{
    if (s->in_count == 0) {
        s->in_first = 0;
    }
    memcpy(s->in + s->in_first + s->in_count, bytes, length);
    s->in_count += length;
}

void scripted_break(struct scripted *s)
{
    s->broke = true;
}

struct rr_inputs *scripted_inputs(struct scripted *s)
{
    return &s->inputs;
}

uint32_t scripted_tick(struct scripted *s)
{
    rr_device_tick(&s->device);
    return s->device.tick;
}

/* Hands over what was written since the last call. */
const char *scripted_take(struct scripted *s, uint32_t *length)
{
    *length = s->out_count;
    s->out_count = 0;
    return s->out;
}

int scripted_duty(const struct scripted *s, uint8_t axis)
{
    return s->duty[axis];
}

uint32_t scripted_pulse_ns(const struct scripted *s, uint8_t servo)
{
    return s->pulse_ns[servo];
}
