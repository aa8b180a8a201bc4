/* Fuzz target: a whole device under any bytes, requests, inputs, BREAKs and restarts, each tick judged by the witness.
 *
 * The data is a script: a byte chooses what happens in the coming tick, the next ones say how. For libFuzzer; see
 * scripts/dev/fuzz.py. */
#include "rig.h"
#include "witness.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define LINE_HELD 128u /* of the line under way; longer ones are overlong all the same */

enum step { S_TICKS, S_RAW, S_SEALED, S_REQUEST, S_INPUTS, S_BREAK, S_RESTART, S_REPEAT, S_COUNT };

struct script {
    const uint8_t *data;
    size_t left;
};

static struct rig rig;
static struct witness witness;
static uint8_t line[LINE_HELD]; /* bytes since the last LF */
static size_t line_length;

static uint8_t next(struct script *script)
{
    if (script->left == 0) {
        return 0;
    }
    script->left--;
    return *script->data++;
}

static void start(uint8_t cause, int32_t fault)
{
    static int32_t limits[W_LIMITS];
    rig.in_count = 0;
    rig.broke = false;
    rig_start(&rig, cause, fault);
    for (uint8_t i = 0; i < W_LIMITS; i++) {
        limits[i] = rr_limits_at(&rig.device.limits, i);
    }
    bool tripped = fault != 0 || cause == RR_CAUSE_BROWNOUT || cause == RR_CAUSE_WATCHDOG;
    witness_begin(&witness, limits, rig.device.tick, RR_TICK_US, tripped);
    line_length = 0;
}

/* One tick; `ended` where a line's LF has come. */
static void tick(bool ended)
{
    bool broke = rig.broke;
    rig_tick(&rig);
    struct witness_tick seen = {
        .sent = ended ? line : NULL,
        .sent_length = line_length,
        .told = rig.out,
        .told_length = rig.out_count,
        .broke = broke,
        .counts = rig.inputs.counts[0],
        .current_ma = rig.inputs.current_ma[0],
        .supply_mv = rig.inputs.supply_mv,
        .duty = rig.duty,
        .pulse_ns = rig.pulse_ns,
    };
    const char *broken = witness_judge(&witness, &seen);
    if (ended) {
        line_length = 0;
    }
    if (broken != NULL) {
        fprintf(stderr, "broken: %s\n%.*s", broken, (int)rig.out_count, rig.out);
        abort();
    }
}

/* Has bytes arrive, at most one whole line in a tick. */
static void feed(const uint8_t *bytes, size_t length)
{
    for (size_t i = 0; i < length; i++) {
        rig.in[rig.in_count++] = bytes[i];
        line[line_length] = bytes[i];
        line_length += line_length < LINE_HELD - 1u ? 1u : 0u;
        if (bytes[i] == '\n' || rig.in_count == RR_HOST_LINE_MAX) {
            tick(bytes[i] == '\n');
        }
    }
}

static void feed_sealed(const char *body)
{
    char sealed[WITNESS_LINE_MAX + 8];
    feed((const uint8_t *)sealed, witness_seal(body, sealed));
}

static void send(const char *text)
{
    static uint8_t tag;
    char body[120];
    tag = (uint8_t)(tag == 200 ? 0 : tag + 1);
    snprintf(body, sizeof body, "%02x %s", tag, text);
    feed_sealed(body);
}

/* A request that may be accepted: its numbers are near what the device has. */
static void send_request(struct script *script)
{
    char text[100];
    uint8_t kind = next(script);
    int amount = (int8_t)next(script);
    unsigned more = next(script);
    unsigned ahead = more % 8u;
    switch (kind % 12u) {
    case 0:
        snprintf(text, sizeof text, "arm %d %08x", 50 + amount, witness_digest(witness.agreed) ^ (more == 7u));
        break;
    case 1:
        snprintf(text, sizeof text, "ramp 0 %d %u %u", amount * 20, more / 8u, witness.tick + ahead);
        break;
    case 2:
        snprintf(text, sizeof text, "swing 0 %d %u %u", amount == 0 ? 0 : 1500 + 4 * amount, amount == 0 ? 0 : more / 8u,
                 witness.tick + ahead);
        break;
    case 3:
        snprintf(text, sizeof text, "rest 0 %s %u", amount < 0 ? "brake" : "coast", witness.tick + ahead);
        break;
    case 4: {
        enum witness_limit limit = (enum witness_limit)(more % W_LIMITS);
        snprintf(text, sizeof text, "limit %s 0 %d", witness_limit_word(limit), witness.agreed[limit] + amount * amount * amount / 100);
        break;
    }
    case 5:
        snprintf(text, sizeof text, "log %u %d %s", more, amount & 0xFF, (amount & 1) != 0 ? "plain" : "packed");
        break;
    case 6:
        snprintf(text, sizeof text, "trail 0 %u", more);
        break;
    case 7:
        snprintf(text, sizeof text, "again %u", more);
        break;
    default: {
        static const char *const words[] = {"beat", "state", "disarm", "stop 0", "stop 1", "clear", "why", "counters", "who"};
        snprintf(text, sizeof text, "%s", words[more % (sizeof words / sizeof words[0])]);
        break;
    }
    }
    send(text);
}

static void send_bytes(struct script *script, bool sealed)
{
    char bytes[120];
    size_t length = next(script) % 100u;
    length = length < script->left ? length : script->left;
    for (size_t i = 0; i < length; i++) {
        bytes[i] = (char)next(script);
    }
    bytes[length] = '\0';
    if (!sealed) {
        feed((const uint8_t *)bytes, length);
    } else if (strlen(bytes) < 74u && strchr(bytes, '\n') == NULL) { /* a whole line that may be right */
        feed_sealed(bytes);
    }
}

static void change_inputs(struct script *script)
{
    uint32_t counts = (uint32_t)rig.inputs.counts[0] + (uint32_t)(int8_t)next(script);
    rig.inputs.counts[0] = (int32_t)counts;
    rig.inputs.current_ma[0] = (int8_t)next(script) * 520;
    rig.inputs.supply_mv = next(script) * 100;
}

static void act(struct script *script)
{
    switch (next(script) % S_COUNT) {
    case S_TICKS:
        for (uint8_t ticks = next(script); ticks > 0; ticks--) {
            tick(false);
        }
        break;
    case S_RAW:
        send_bytes(script, false);
        break;
    case S_SEALED:
        send_bytes(script, true);
        break;
    case S_REQUEST:
        send_request(script);
        break;
    case S_INPUTS:
        change_inputs(script);
        tick(false);
        break;
    case S_BREAK:
        rig.broke = true;
        tick(false);
        break;
    case S_RESTART:
        start(next(script) % 5u, next(script) == 255u);
        break;
    default:
        if (witness.last_sent[0] != '\0' && line_length == 0) {
            feed_sealed(witness.last_sent);
        }
        break;
    }
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    struct script script = {data, size};
    rig_clear(&rig);
    if (next(&script) % 2u == 0) { /* a lively board: everything comes soon */
        static const uint8_t soon[][2] = {{RR_LIMIT_STOP_TICKS, 9}, {RR_LIMIT_DWELL_TICKS, 5}, {RR_LIMIT_STILL_TICKS, 3},
                                          {RR_LIMIT_TRIP_TICKS, 2}, {RR_LIMIT_STALL_TICKS, 20}};
        for (size_t i = 0; i < sizeof soon / sizeof soon[0]; i++) {
            rig_preset(&rig, soon[i][0], soon[i][1]);
        }
        rig_preset(&rig, RR_LIMIT_SLEW_UP_DUTY, 200);
    }
    start(RR_CAUSE_POWER, 0);
    while (script.left > 0) {
        act(&script);
    }
    return 0;
}
