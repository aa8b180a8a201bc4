/* A witness of SPEC section 12; see witness.h. */
#include "witness.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define HOST_LINE_MAX 80u
#define HALF_RANGE    0x80000000u

struct rule {
    const char *word;
    uint8_t number;
    int8_t tighter; /* -1: lower, 1: higher, 0: neither */
    bool zero_is_off;
};

/* Written from SPEC section 8, `limit`. */
static const struct rule rules[W_LIMITS] = {
    {"lease_ms", 1, -1, false},      {"stop_ticks", 2, -1, false},     {"under_mv", 3, 1, true},
    {"over_mv", 4, -1, false},       {"supply_ticks", 5, -1, false},   {"ceiling_duty", 16, -1, false},
    {"slew_up_duty", 17, -1, false}, {"slew_down_duty", 18, 0, false}, {"dwell_ticks", 19, 1, false},
    {"still_counts", 20, -1, false}, {"still_ticks", 21, 1, false},    {"sense", 22, 0, false},
    {"trip_ma", 23, -1, false},      {"trip_ticks", 24, -1, false},    {"offset_ma", 25, 0, false},
    {"rated_ma", 26, 0, false},      {"thermal_s", 27, 0, false},      {"stall_duty", 28, -1, true},
    {"stall_counts", 29, 1, false},  {"stall_ticks", 30, -1, false},   {"wrong_counts", 31, -1, false},
    {"speed_counts", 32, -1, true},  {"pulse_min_us", 48, 1, false},   {"pulse_max_us", 49, -1, false},
    {"pulse_slew_ns", 50, -1, false}, {"pulse_home_us", 51, 0, false},
};

/* A byte at a time, by the check's contribution of each first byte. */
static uint16_t check_of(const char *text, size_t length)
{
    static uint16_t of_byte[256];
    for (uint32_t byte = of_byte[1] != 0 ? 256u : 0u; byte < 256u; byte++) {
        uint32_t crc = byte << 8;
        for (int bit = 0; bit < 8; bit++) {
            crc = (crc & 0x8000u) != 0 ? (crc << 1 ^ 0x1021u) & 0xFFFFu : crc << 1;
        }
        of_byte[byte] = (uint16_t)crc;
    }
    uint32_t crc = 0xFFFF;
    for (size_t i = 0; i < length; i++) {
        crc = (crc << 8 & 0xFFFFu) ^ of_byte[crc >> 8 ^ (uint8_t)text[i]];
    }
    return (uint16_t)crc;
}

size_t witness_seal(const char *body, char *line)
{
    return (size_t)snprintf(line, WITNESS_LINE_MAX, "%s %04x\n", body, check_of(body, strlen(body)));
}

/* Takes a line apart: printable, sealed rightly. The body goes to `body`, ended by NUL. */
static bool opened(const char *line, size_t length, size_t most, char *body)
{
    if (length < 6 || length > most || line[length - 1] != '\n') {
        return false;
    }
    length--;
    if (most == HOST_LINE_MAX && line[length - 1] == '\r') {
        length--;
    }
    for (size_t i = 0; i < length; i++) {
        if (line[i] < 0x20 || line[i] > 0x7E) {
            return false;
        }
    }
    char check[6];
    if (length < 6) {
        return false;
    }
    snprintf(check, sizeof check, " %04x", check_of(line, length - 5));
    memcpy(body, line, length - 5);
    body[length - 5] = '\0';
    return memcmp(line + length - 5, check, 5) == 0;
}

static bool is_tagged(const char *body)
{
    return strspn(body, "0123456789abcdef") >= 2 && (body[2] == ' ' || body[2] == '\0');
}

bool witness_request(const uint8_t *line, size_t length, char *body)
{
    return opened((const char *)line, length, HOST_LINE_MAX, body) && is_tagged(body);
}

uint32_t witness_digest(const int32_t *limits)
{
    uint32_t crc = 0xFFFFFFFFu;
    for (int i = 0; i < W_LIMITS; i++) {
        for (int shift = 24; shift >= 0; shift -= 8) {
            crc ^= (uint32_t)limits[i] >> shift & 0xFFu;
            for (int bit = 0; bit < 8; bit++) {
                crc = (crc & 1u) != 0 ? crc >> 1 ^ 0xEDB88320u : crc >> 1;
            }
        }
    }
    return ~crc;
}

bool witness_is_looser(enum witness_limit limit, int32_t present, int32_t value)
{
    const struct rule *rule = &rules[limit];
    if (value == present) {
        return false;
    }
    if (rule->zero_is_off && (value == 0 || present == 0)) {
        return value == 0;
    }
    return rule->tighter == 0 || (rule->tighter < 0) == (value > present);
}

uint8_t witness_limit_number(enum witness_limit limit)
{
    return rules[limit].number;
}

const char *witness_limit_word(enum witness_limit limit)
{
    return rules[limit].word;
}

void witness_begin(struct witness *w, const int32_t *limits, uint32_t tick, uint32_t tick_us, bool tripped)
{
    memset(w, 0, sizeof *w);
    memcpy(w->limit, limits, sizeof w->limit);
    memcpy(w->agreed, limits, sizeof w->agreed);
    w->tick = tick;
    w->tick_us = tick_us;
    w->latch = tripped ? W_CATEGORY_0 : W_FREE;
}

static uint16_t one_more(uint16_t ticks)
{
    return ticks < WITNESS_LONG ? (uint16_t)(ticks + 1u) : ticks;
}

static int32_t size_of(int32_t value)
{
    return value < 0 ? -value : value;
}

static int32_t clamped(const struct witness *w, int32_t pulse_ns)
{
    int32_t least = w->limit[W_PULSE_MIN_US] * 1000;
    int32_t most = w->limit[W_PULSE_MAX_US] * 1000;
    return pulse_ns < least ? least : pulse_ns > most ? most : pulse_ns;
}

/* ---- what was said ---- */

static const char *agreed_limit(struct witness *w, const char *arguments)
{
    char word[20];
    unsigned index;
    long value;
    if (sscanf(arguments, "%19s %u %ld", word, &index, &value) != 3) {
        return NULL; /* it was read only */
    }
    for (int i = 0; i < W_LIMITS; i++) {
        if (strcmp(rules[i].word, word) == 0) {
            if (w->live && witness_is_looser((enum witness_limit)i, w->agreed[i], (int32_t)value)) {
                return "S6: a limit was loosened while armed";
            }
            w->agreed[i] = (int32_t)value;
        }
    }
    return NULL;
}

static const char *agreed_arm(struct witness *w, const char *arguments)
{
    unsigned lease_ms = 0;
    unsigned digest = 0;
    if (sscanf(arguments, "%u %8x", &lease_ms, &digest) != 2 || digest != witness_digest(w->agreed)) {
        return "S6: armed with another digest than the device's";
    }
    if (w->latch == W_CATEGORY_0 || w->latch == W_CATEGORY_1 || w->live) {
        return "S5: armed with a trip latched, or twice";
    }
    w->latch = W_FREE;
    w->live = true;
    w->stopping = false;
    w->lease_ticks = (lease_ms * 1000u + w->tick_us - 1u) / w->tick_us;
    return NULL;
}

static const char *agreed_clear(struct witness *w)
{
    if ((w->latch != W_CATEGORY_0 && w->latch != W_CATEGORY_1) || w->live) {
        return "CLEAR-1: cleared with nothing latched";
    }
    if (w->by_current && size_of(w->current_ma) > w->limit[W_TRIP_MA]) {
        return "CLEAR-1: cleared while the cause persists";
    }
    w->latch = W_CLEARED;
    return NULL;
}

/* The last field of an order is its start. */
static const char *agreed_order(const struct witness *w, const char *arguments)
{
    const char *last = strrchr(arguments, ' ');
    uint32_t start = last != NULL ? (uint32_t)strtoul(last + 1, NULL, 10) : 0;
    uint32_t ahead = start - w->tick;
    return ahead == 0 || ahead >= HALF_RANGE ? "ORDER-2: a late order was accepted" : NULL;
}

/* A new request was answered ok. */
static const char *agreed(struct witness *w, const char *request)
{
    char word[10] = "";
    int length = 0;
    if (sscanf(request, "%9s%n", word, &length) != 1) {
        return NULL;
    }
    const char *arguments = request + length;
    if (strcmp(word, "limit") == 0) {
        return agreed_limit(w, arguments);
    }
    if (strcmp(word, "arm") == 0) {
        return agreed_arm(w, arguments);
    }
    if (strcmp(word, "clear") == 0) {
        return agreed_clear(w);
    }
    if (strcmp(word, "ramp") == 0 || strcmp(word, "swing") == 0 || strcmp(word, "rest") == 0) {
        return agreed_order(w, arguments);
    }
    return NULL;
}

static void told_notice(struct witness *w, const char *notice)
{
    char word[12] = "";
    char first[16] = "";
    sscanf(notice, "%11s %*u %15s", word, first);
    if (strcmp(word, "off") == 0) {
        w->live = false;
        w->stopping = false;
    } else if (strcmp(word, "stop") == 0 && first[0] == '1') {
        w->stopping = true;
        w->stop_for = 0;
    } else if (strcmp(word, "trip") == 0) {
        bool slow = strcmp(first, "overload") == 0 || strcmp(first, "link_lost") == 0 || strcmp(first, "late_order") == 0;
        w->latch = slow ? W_CATEGORY_1 : W_CATEGORY_0;
        w->by_current = strcmp(first, "overcurrent") == 0;
    }
}

/* The lines of one tick: its answer, and the first of its notices with all after it. */
struct told {
    char answer[WITNESS_LINE_MAX + 1];
    char notice[12][40]; /* from the word on; longer ones do not matter here */
    int notices;
    bool tripped;
};

/* False where a line is not well made, or there are two answers. */
static bool read_told(const struct witness_tick *seen, struct told *told)
{
    char body[WITNESS_LINE_MAX + 1];
    const char *line = seen->told;
    size_t left = seen->told_length;
    told->answer[0] = '\0';
    told->notices = 0;
    told->tripped = false;
    while (left > 0) {
        const char *end = memchr(line, '\n', left);
        size_t length = end != NULL ? (size_t)(end - line) + 1u : left;
        if (!opened(line, length, WITNESS_LINE_MAX, body)) {
            return false;
        }
        if (body[0] == 'N' && told->notices < 12) {
            snprintf(told->notice[told->notices++], sizeof told->notice[0], "%.39s", body + 4);
            told->tripped = told->tripped || strncmp(body + 4, "trip", 4) == 0;
        } else if (body[0] != 'D') {
            if (told->answer[0] != '\0') {
                return false;
            }
            strcpy(told->answer, body);
        }
        line += length;
        left -= length;
    }
    return true;
}

/* What the host's line must lead to, in the state before the notices of this tick. */
static const char *judge_request(struct witness *w, const char *request, const char *answer)
{
    if (answer[0] == '\0' || strncmp(request, answer, 2) != 0) {
        return "TAG-2: a valid request was not answered";
    }
    bool urgent = strncmp(request, "ff", 2) == 0;
    if (!urgent && w->last_sent[0] != '\0' && strncmp(request, w->last_sent, 2) == 0) {
        if (strcmp(request, w->last_sent) == 0) {
            return strcmp(answer, w->last_told) != 0 ? "TAG-3: a repeat was answered otherwise" : NULL;
        }
        w->silent_for = 0;
        return strncmp(answer + 3, "no ", 3) != 0 ? "TAG-4: a used tag was taken for another body" : NULL;
    }
    w->silent_for = 0;
    if (!urgent) {
        strcpy(w->last_sent, request);
        strcpy(w->last_told, answer);
    }
    return strncmp(answer + 3, "ok ", 3) == 0 ? agreed(w, request + 2) : NULL;
}

static const char *judge_lines(struct witness *w, const struct witness_tick *seen)
{
    char request[WITNESS_LINE_MAX + 1];
    struct told told;
    if (!read_told(seen, &told)) {
        return "LINE-2: a line of the device is not well made";
    }
    const char *broken = NULL;
    if (seen->sent != NULL && witness_request(seen->sent, seen->sent_length, request)) {
        bool repeat = strcmp(request, w->last_sent) == 0;
        broken = judge_request(w, request, told.answer);
        const char *last = strrchr(told.answer, ' ');
        if (broken == NULL && !repeat && last != NULL && strcmp(last, " late") == 0 && !told.tripped) {
            broken = "ORDER-2: a late order did not trip";
        }
    } else if (told.answer[0] != '\0') {
        broken = "BAD-4: something other than a request was answered";
    }
    for (int i = 0; i < told.notices; i++) { /* the answer comes first, then the notices */
        told_notice(w, told.notice[i]);
    }
    return broken;
}

/* ---- what was done ---- */

static void watch_inputs(struct witness *w, const struct witness_tick *seen)
{
    int32_t away = (int32_t)((uint32_t)seen->counts - (uint32_t)w->mark);
    if (away > w->limit[W_STILL_COUNTS] || away < -w->limit[W_STILL_COUNTS]) {
        w->mark = seen->counts;
        w->still_for = 0;
    } else {
        w->still_for = one_more(w->still_for);
    }
    w->current_ma = seen->current_ma - w->limit[W_OFFSET_MA];
    w->over_for = size_of(w->current_ma) > w->limit[W_TRIP_MA] ? one_more(w->over_for) : 0;
}

static const char *judge_duty(const struct witness *w, int32_t duty)
{
    int32_t before = size_of(w->duty);
    int32_t now = size_of(duty);
    if (now > w->limit[W_CEILING_DUTY]) {
        return "S1: the duty exceeds the ceiling";
    }
    if ((duty > 0 && w->duty < 0) || (duty < 0 && w->duty > 0)) {
        return "S3: the duty changed its sign in one step";
    }
    if (w->duty == 0 && duty != 0 && (duty > 0 ? 1 : -1) != w->last_sign) {
        if (w->zero_for < w->limit[W_DWELL_TICKS]) {
            return "S3: the duty left zero before the dwell";
        }
        if (w->limit[W_SENSE] != 0 && w->still_for < w->limit[W_STILL_TICKS]) {
            return "S3: the duty left zero before standstill";
        }
    }
    int32_t cut = before > w->limit[W_CEILING_DUTY] ? w->limit[W_CEILING_DUTY] : before;
    if (now - cut > w->limit[W_SLEW_UP_DUTY]) {
        return "S2: the duty grew by more than the slew limit";
    }
    if (cut - now > w->limit[W_SLEW_DOWN_DUTY] && !(duty == 0 && !w->live)) {
        return "S2: the duty fell by more than the slew limit";
    }
    return NULL;
}

static const char *judge_pulse(const struct witness *w, int32_t pulse_ns)
{
    if (pulse_ns == 0) {
        return NULL;
    }
    if (clamped(w, pulse_ns) != pulse_ns) {
        return "S7: the pulse lies outside its limits";
    }
    if (w->pulse_ns == 0) {
        return pulse_ns != clamped(w, w->limit[W_PULSE_HOME_US] * 1000) ? "S7: the first pulse is not home" : NULL;
    }
    int32_t change = pulse_ns - clamped(w, (int32_t)w->pulse_ns);
    return size_of(change) > w->limit[W_PULSE_SLEW_NS] ? "S7: the pulse changed by more than its slew limit" : NULL;
}

static const char *judge_outputs(const struct witness *w, const struct witness_tick *seen)
{
    bool on = seen->duty != 0 || seen->pulse_ns != 0;
    if (on && !w->live) {
        return "S5: an output is on without an arm, or after an off";
    }
    if (w->live && (w->latch == W_CATEGORY_0 || w->latch == W_CLEARED)) {
        return "S5: live with a trip of category 0 latched";
    }
    if (w->live && w->stopping && w->stop_for >= w->limit[W_STOP_TICKS]) {
        return "S5, STOP-5: a category 1 stop lasts longer than stop_ticks";
    }
    if (w->live && w->latch == W_CATEGORY_1 && !w->stopping) {
        return "S5: a trip of category 1 did not stop";
    }
    if (seen->duty != 0 && w->silent_for > w->lease_ticks + (uint32_t)w->limit[W_STOP_TICKS]) {
        return "S4: the bridge is on with the lease and stop_ticks over";
    }
    if (w->live && w->over_for >= w->limit[W_TRIP_TICKS]) {
        return "TRIP-3: too much current for trip_ticks did not trip in its tick";
    }
    const char *broken = judge_duty(w, seen->duty);
    return broken != NULL ? broken : judge_pulse(w, (int32_t)seen->pulse_ns);
}

const char *witness_judge(struct witness *w, const struct witness_tick *seen)
{
    w->silent_for = one_more(w->silent_for);
    w->stop_for = one_more(w->stop_for);
    const char *broken = judge_lines(w, seen);
    if (broken != NULL) {
        return broken;
    }
    watch_inputs(w, seen);
    broken = judge_outputs(w, seen);
    w->zero_for = seen->duty == 0 ? one_more(w->zero_for) : 0;
    if (seen->duty != 0) {
        w->last_sign = seen->duty > 0 ? 1 : -1;
    }
    w->duty = seen->duty;
    w->pulse_ns = seen->pulse_ns;
    memcpy(w->limit, w->agreed, sizeof w->limit);
    w->tick++;
    return broken;
}
