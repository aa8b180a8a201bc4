/* Explores the real core exhaustively in small models: every sequence of inputs, breadth first, until no new state comes.
 *
 *     explore MODEL [MOST_STATES]      quick | all | axis | trips | orders | ceiling | dwell | servo | limits
 *
 * `quick` is all but `axis`.
 *
 * A model is the core with tiny limits, a lease of four ticks, and an alphabet of what may happen in one tick: at most one
 * line of the host, with one set of inputs. The witness (witness.h) judges every tick of every sequence. Two states are
 * the same where all that the coming ticks can depend on is the same, with ticks counted from now and counts from the
 * mark; one state in SAMPLED that is met again is gone on from all the same, and must lead to the same states.
 * Prints states and ticks; exit status 1, and the shortest sequence that leads there, where a clause is broken. */
#include "rig.h"
#include "witness.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define SAMPLED     64u
#define TABLE_SIZE  (1u << 22)
#define STATES_MAX  (TABLE_SIZE / 2u)
#define EVENTS_MAX  96u
#define DEEP        20u /* counters of the core that only compare with limits below this */

enum line_kind { L_NONE, L_REPEAT, L_BARE_STOP, L_GARBLED, L_ARM, L_ARM_WRONG, L_ORDER, L_OTHER };

struct event {
    enum line_kind kind;
    const char *text; /* of the line; an order's is followed by its start */
    uint32_t ahead;   /* an order's start after the present tick */
    bool moved;       /* the shaft has turned */
    bool over;        /* too much current */
    bool broke;       /* a BREAK */
};

struct model {
    struct event event[EVENTS_MAX];
    uint32_t count;
};

/* All that the coming ticks can depend on. Zeroed before it is filled in, so that bytes may be compared. */
struct key {
    int32_t limit[W_LIMITS];
    int32_t demand[6];
    int32_t swing[6];
    int32_t order[RR_QUEUE][3];
    uint8_t order_kind[RR_QUEUE];
    uint32_t silent, lease, stopping_for;
    int32_t pulse_ns, mark;
    int16_t duty;
    int8_t last_sign;
    int32_t stall_mark, furthest;
    uint8_t orders, state, trip, over_for, zero_for, still_for, held, brake, demand_pending, swing_pending;
    uint8_t pushing, stall_for;
    int8_t push_sign;
    /* of the witness */
    int32_t w_mark, w_current_ma;
    uint32_t w_silent, w_lease;
    uint16_t w_stop_for;
    uint8_t w_zero, w_still, w_over, w_live, w_stopping, w_latch, w_by_current;
    int8_t w_sign;
};

struct place {
    struct witness witness;
    uint32_t number; /* of the state */
    bool again;      /* met before: only to be compared */
    struct rig rig;  /* last, with what was sent at its end: a copy leaves that out */
};
#define PLACE_COPIED offsetof(struct place, rig.out)

struct state {
    uint64_t hash[2];
    uint64_t led_to; /* hash of the states that its events lead to, in order */
    uint32_t from;
    uint8_t by; /* event */
};

static struct state *states;
static uint32_t *table;
static uint32_t state_count;
static uint32_t most_states = STATES_MAX;
static uint64_t ticks_run;
static uint64_t compared;
static struct place live; /* the one that runs: the device keeps pointers into itself and to its port */

static uint8_t held(uint32_t ticks)
{
    return (uint8_t)(ticks < DEEP ? ticks : DEEP);
}

static void put_glide(int32_t *to, const struct rr_glide *glide)
{
    to[0] = glide->value;
    to[1] = (int32_t)glide->left;
    if (glide->left != 0) {
        to[2] = (int32_t)glide->whole;
        to[3] = (int32_t)glide->part;
        to[4] = (int32_t)(glide->sum * 64u + glide->ticks);
        to[5] = glide->down;
    }
}

static void key_of(const struct place *place, struct key *key)
{
    const struct rr_device *d = &place->rig.device;
    const struct witness *w = &place->witness;
    const struct rr_axis *axis = &d->axis[0];
    bool armed = d->latch.state == RR_STATE_ARMED;
    memset(key, 0, sizeof *key);
    for (uint8_t i = 0; i < W_LIMITS; i++) {
        key->limit[i] = rr_limits_at(&d->limits, i);
    }
    put_glide(key->demand, &axis->demand);
    put_glide(key->swing, &d->servo[0].swing);
    key->orders = rr_device_queued(d);
    for (uint8_t i = 0; i < key->orders; i++) {
        key->order[i][0] = (int32_t)(d->u.orders.order[i].start - d->tick);
        key->order[i][1] = (int32_t)d->u.orders.order[i].ticks;
        key->order[i][2] = d->u.orders.order[i].value;
        key->order_kind[i] = d->u.orders.order[i].kind_index;
    }
    key->silent = armed ? held((uint16_t)((uint16_t)d->tick - d->renewed_low)) : 0;
    key->lease = armed ? d->lease_ticks : 0;
    key->stopping_for = d->latch.state == RR_STATE_STOPPING ? held(d->tick - d->latch.stop_begun) : 0;
    key->pulse_ns = d->servo[0].pulse_ns;
    key->mark = axis->chain.mark - place->rig.inputs.counts[0];
    key->duty = axis->chain.duty;
    key->last_sign = axis->chain.last_sign;
    key->state = d->latch.state;
    key->trip = d->latch.trip;
    key->over_for = held(axis->guard.over_for);
    if (axis->guard.pushing) {
        key->pushing = true;
        key->push_sign = axis->guard.push_sign;
        key->stall_for = held(axis->guard.stall_for);
        key->stall_mark = axis->guard.stall_mark - place->rig.inputs.counts[0];
        key->furthest = axis->guard.furthest - place->rig.inputs.counts[0];
    }
    key->zero_for = held(axis->chain.zero_for);
    key->still_for = held(axis->chain.still_for);
    key->held = axis->chain.held_for != 0;
    key->brake = axis->brake;
    key->demand_pending = axis->demand.pending;
    key->swing_pending = d->servo[0].swing.pending;
    key->w_mark = w->mark - place->rig.inputs.counts[0];
    key->w_current_ma = w->current_ma;
    key->w_silent = w->live ? held(w->silent_for) : 0;
    key->w_lease = w->live ? w->lease_ticks : 0;
    key->w_stop_for = w->stopping ? held(w->stop_for) : 0;
    key->w_zero = held(w->zero_for);
    key->w_still = held(w->still_for);
    key->w_over = held(w->over_for);
    key->w_live = w->live;
    key->w_stopping = w->stopping;
    key->w_latch = (uint8_t)w->latch;
    key->w_by_current = w->by_current;
    key->w_sign = w->last_sign;
}

static uint64_t mixed(uint64_t hash, uint64_t word)
{
    hash = (hash ^ word) * 0x9E3779B97F4A7C15u;
    return hash ^ hash >> 29;
}

static void hash_key(const struct key *key, uint64_t *hash)
{
    hash[0] = 1;
    hash[1] = 2;
    uint64_t word;
    for (size_t at = 0; at < sizeof *key; at += sizeof word) {
        size_t left = sizeof *key - at;
        word = 0;
        memcpy(&word, (const char *)key + at, left < sizeof word ? left : sizeof word);
        hash[0] = mixed(hash[0], word);
        hash[1] = mixed(hash[1], word ^ 0xD1B54A32D192ED03u);
    }
}

/* The state's number; it is new where the number is the count before. */
static uint32_t number_of(const struct place *place, uint32_t from, uint8_t by)
{
    struct key key;
    uint64_t hash[2];
    key_of(place, &key);
    hash_key(&key, hash);
    uint32_t slot = (uint32_t)hash[0] & (TABLE_SIZE - 1u);
    while (table[slot] != 0) {
        const struct state *state = &states[table[slot] - 1u];
        if (state->hash[0] == hash[0] && state->hash[1] == hash[1]) {
            return table[slot] - 1u;
        }
        slot = (slot + 1u) & (TABLE_SIZE - 1u);
    }
    if (state_count == most_states) {
        fprintf(stderr, "more than %u states: the model is not small\n", most_states);
        exit(2);
    }
    states[state_count] = (struct state){{hash[0], hash[1]}, 0, from, by};
    table[slot] = ++state_count;
    return state_count - 1u;
}

/* ---- one tick ---- */

/* The line of an event, with its LF; 0 where it has none. */
static size_t line_of(const struct event *event, const struct place *place, char *line)
{
    const struct witness *w = &place->witness;
    char body[WITNESS_LINE_MAX];
    unsigned tag = w->last_sent[0] == '\0' ? 0u : ((unsigned)strtoul(w->last_sent, NULL, 16) + 1u) % 200u;
    uint32_t digest = event->kind == L_ARM || event->kind == L_ARM_WRONG ? witness_digest(w->agreed) : 0;
    switch (event->kind) {
    case L_NONE:
        return 0;
    case L_REPEAT:
        return w->last_sent[0] == '\0' ? 0 : witness_seal(w->last_sent, line);
    case L_BARE_STOP:
        return (size_t)sprintf(line, "stop\n");
    case L_GARBLED:
        return (size_t)sprintf(line, "%02x beat 0000\n", tag);
    case L_ARM:
    case L_ARM_WRONG:
        snprintf(body, sizeof body, "%02x arm 50 %08x", tag, event->kind == L_ARM ? digest : digest ^ 1u);
        return witness_seal(body, line);
    case L_ORDER:
        snprintf(body, sizeof body, "%02x %s %u", tag, event->text, w->tick + event->ahead);
        return witness_seal(body, line);
    default:
        snprintf(body, sizeof body, "%02x %s", tag, event->text);
        return witness_seal(body, line);
    }
}

static const char *take(struct place *place, const struct event *event)
{
    struct rig *rig = &place->rig;
    char line[WITNESS_LINE_MAX];
    size_t length = line_of(event, place, line);
    memcpy(rig->in, line, length);
    rig->in_count = (uint16_t)length;
    rig->inputs.counts[0] += event->moved ? 1 : 0;
    rig->inputs.current_ma[0] = event->over ? -500 : 0;
    rig->broke = event->broke;
    rig_tick(rig);
    ticks_run++;
    struct witness_tick seen = {
        .sent = length != 0 ? (const uint8_t *)line : NULL,
        .sent_length = length,
        .told = rig->out,
        .told_length = rig->out_count,
        .broke = event->broke,
        .counts = rig->inputs.counts[0],
        .current_ma = rig->inputs.current_ma[0],
        .supply_mv = rig->inputs.supply_mv,
        .duty = rig->duty,
        .pulse_ns = rig->pulse_ns,
    };
    return witness_judge(&place->witness, &seen);
}

static void tell_event(const struct event *event)
{
    static const char *const kinds[] = {"-", "the last line again", "bare stop", "a garbled line", "arm",
                                        "arm, wrong digest"};
    printf("    %s", event->kind >= L_ORDER ? event->text : kinds[event->kind]);
    if (event->kind == L_ORDER) {
        printf(" in %u ticks", event->ahead);
    }
    printf("%s%s%s\n", event->moved ? ", turning" : "", event->over ? ", overcurrent" : "", event->broke ? ", BREAK" : "");
}

static void tell_path(const struct model *model, uint32_t number, uint8_t last)
{
    uint8_t path[1000];
    uint32_t length = 0;
    path[length++] = last;
    while (number != 0 && length < sizeof path) {
        path[length++] = states[number].by;
        number = states[number].from;
    }
    while (length-- > 0) {
        tell_event(&model->event[path[length]]);
    }
}

/* ---- breadth first ---- */

struct layer {
    struct place *place;
    uint32_t count;
    uint32_t room;
};

static struct place *next_place(struct layer *layer)
{
    if (layer->count == layer->room) {
        layer->room = layer->room == 0 ? 256 : layer->room * 2;
        layer->place = realloc(layer->place, layer->room * sizeof *layer->place);
        if (layer->place == NULL) {
            fprintf(stderr, "out of memory\n");
            exit(2);
        }
    }
    return &layer->place[layer->count++];
}

/* A line that repeats must leave the device as no line would (TAG-3), and so must a garbled one. */
static bool stands_for_nothing(const struct event *event)
{
    return (event->kind == L_REPEAT || event->kind == L_GARBLED) && !event->moved && !event->over && !event->broke;
}

/* Goes on from one place by every event. False, and told, where a clause is broken. */
static bool expand(const struct model *model, struct layer *here, uint32_t at, struct layer *next)
{
    uint64_t led_to = 0;
    uint32_t by_nothing = 0;
    uint32_t number = here->place[at].number;
    bool again = here->place[at].again;
    for (uint32_t i = 0; i < model->count; i++) {
        const struct event *event = &model->event[i];
        memcpy(&live, &here->place[at], PLACE_COPIED);
        const char *broken = take(&live, event);
        uint32_t before = state_count;
        uint32_t then = broken != NULL ? 0 : number_of(&live, number, (uint8_t)i);
        by_nothing = i == 0 ? then : by_nothing;
        if (broken == NULL && stands_for_nothing(event) && then != by_nothing) {
            broken = "TAG-3, CHECK-2: a repeat or a garbled line had an effect";
        }
        if (broken != NULL) {
            printf("broken: %s\n", broken);
            tell_path(model, number, (uint8_t)i);
            return false;
        }
        led_to = mixed(led_to, then);
        bool sampled = ticks_run % SAMPLED == 0;
        if (state_count != before || (sampled && !again)) {
            struct place *place = next_place(next);
            memcpy(place, &live, PLACE_COPIED);
            place->number = then;
            place->again = state_count == before;
        }
    }
    if (!again) {
        states[number].led_to = led_to;
    } else if (states[number].led_to != 0) {
        compared++;
        if (states[number].led_to != led_to) {
            printf("two states held for the same are not: the key lacks something\n");
            tell_path(model, number, 0);
            return false;
        }
    }
    return true;
}

/* From `live` on. */
static bool explore(const struct model *model)
{
    struct layer here = {NULL, 0, 0};
    struct layer next = {NULL, 0, 0};
    uint32_t depth = 0;
    bool sound = true;
    state_count = 0;
    memset(table, 0, TABLE_SIZE * sizeof *table);
    struct place *first = next_place(&next);
    memcpy(first, &live, PLACE_COPIED);
    first->again = false;
    first->number = number_of(first, 0, 0);
    while (next.count != 0 && sound) {
        struct layer swapped = here;
        here = next;
        next = swapped;
        next.count = 0;
        depth++;
        for (uint32_t at = 0; at < here.count && sound; at++) {
            sound = expand(model, &here, at, &next);
        }
    }
    free(here.place);
    free(next.place);
    printf("%u states, %u deep\n", state_count, depth);
    return sound;
}

/* ---- the models ---- */

static void add(struct model *model, struct event event)
{
    if (model->count == EVENTS_MAX) {
        fprintf(stderr, "EVENTS_MAX is too small\n");
        exit(2);
    }
    model->event[model->count++] = event;
}

/* Every line so far with a turning shaft, or with too much current, too. */
static void add_inputs(struct model *model, bool moved, bool over)
{
    uint32_t lines = model->count;
    for (uint32_t i = 0; i < lines; i++) {
        struct event event = model->event[i];
        event.moved = moved;
        event.over = over;
        add(model, event);
    }
}

static void add_break(struct model *model)
{
    struct event event = model->event[0];
    event.broke = true;
    add(model, event);
}

static void add_line(struct model *model, enum line_kind kind, const char *text, uint32_t ahead)
{
    struct event event = {kind, text, ahead, false, false, false};
    add(model, event);
}

static void add_common(struct model *model)
{
    add_line(model, L_NONE, "", 0); /* first: `stands_for_nothing` compares with it */
    add_line(model, L_REPEAT, "", 0);
    add_line(model, L_GARBLED, "", 0);
    add_line(model, L_BARE_STOP, "", 0);
    add_line(model, L_ARM, "", 0);
    add_line(model, L_OTHER, "beat", 0);
    add_line(model, L_OTHER, "stop 0", 0);
    add_line(model, L_OTHER, "stop 1", 0);
    add_line(model, L_OTHER, "clear", 0);
    add_line(model, L_OTHER, "disarm", 0);
}

static const int32_t small_limits[W_LIMITS] = {
    [W_LEASE_MS] = 50,       [W_STOP_TICKS] = 1,    [W_UNDER_MV] = 9000,       [W_OVER_MV] = 16000,
    [W_SUPPLY_TICKS] = 5,    [W_CEILING_DUTY] = 3,  [W_SLEW_UP_DUTY] = 1,      [W_SLEW_DOWN_DUTY] = 1,
    [W_DWELL_TICKS] = 2,     [W_STILL_COUNTS] = 0,  [W_STILL_TICKS] = 2,       [W_SENSE] = 1,
    [W_TRIP_MA] = 100,       [W_TRIP_TICKS] = 2,    [W_OFFSET_MA] = 0,         [W_RATED_MA] = 0,
    [W_THERMAL_S] = 60,      [W_STALL_DUTY] = 0,    [W_STALL_COUNTS] = 4,      [W_STALL_TICKS] = 4,
    [W_WRONG_COUNTS] = 24,   [W_SPEED_COUNTS] = 0,  [W_PULSE_MIN_US] = 1100,   [W_PULSE_MAX_US] = 1102,
    [W_PULSE_SLEW_NS] = 700, [W_PULSE_HOME_US] = 1101,
};

static void make_start(struct place *place)
{
    memset(place, 0, sizeof *place);
    rig_clear(&place->rig);
    for (int i = 0; i < W_LIMITS; i++) {
        rig_preset(&place->rig, witness_limit_number((enum witness_limit)i), small_limits[i]);
    }
    rig_start(&place->rig, RR_CAUSE_POWER, 0);
    witness_begin(&place->witness, small_limits, place->rig.device.tick, RR_TICK_US, false);
}

static bool run(const char *name, const struct model *model)
{
    make_start(&live);
    printf("%s: ", name);
    return explore(model);
}

/* Motion either way, with late and gliding orders, a turning shaft, too much current and BREAK. */
static bool explore_axis(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "ramp 0 3 0", 1);
    add_line(&model, L_ORDER, "ramp 0 -3 0", 1);
    add_line(&model, L_ORDER, "ramp 0 0 0", 1);
    add_line(&model, L_ORDER, "ramp 0 3 0", 0);
    uint32_t lines = model.count;
    add_inputs(&model, true, false);
    for (uint32_t i = 0; i < lines; i++) {
        struct event event = model.event[i];
        event.over = true;
        add(&model, event);
    }
    add_break(&model);
    return run("axis", &model);
}

/* Trips and their clearing: too much current, BREAK, late orders, the lease. A small part of `axis`. */
static bool explore_trips(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "ramp 0 3 0", 1);
    add_line(&model, L_ORDER, "ramp 0 3 0", 0);
    add_inputs(&model, false, true);
    add_break(&model);
    return run("trips", &model);
}

/* Orders that glide, wait in the queue and overtake one another. */
static bool explore_orders(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "ramp 0 2 3", 1);
    add_line(&model, L_ORDER, "ramp 0 -1 2", 2);
    add_line(&model, L_ORDER, "rest 0 brake", 1);
    return run("orders", &model);
}

/* The ceiling and the slew tightened and loosened under way, either way of turning. */
static bool explore_ceiling(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "ramp 0 3 0", 1);
    add_line(&model, L_ORDER, "ramp 0 -3 0", 1);
    add_line(&model, L_OTHER, "limit ceiling_duty 0 1", 0);
    add_line(&model, L_OTHER, "limit ceiling_duty 0 3", 0);
    add_line(&model, L_OTHER, "limit slew_up_duty 0 2", 0);
    add_line(&model, L_OTHER, "limit slew_up_duty 0 1", 0);
    return run("ceiling", &model);
}

/* Dwell and standstill tightened and loosened. */
static bool explore_dwell(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "ramp 0 1 0", 1);
    add_line(&model, L_ORDER, "ramp 0 -1 0", 1);
    add_line(&model, L_OTHER, "limit dwell_ticks 0 3", 0);
    add_line(&model, L_OTHER, "limit dwell_ticks 0 1", 0);
    add_inputs(&model, true, false);
    return run("dwell", &model);
}

static bool explore_servo(void)
{
    struct model model = {.count = 0};
    add_common(&model);
    add_line(&model, L_ORDER, "swing 0 1100 0", 1);
    add_line(&model, L_ORDER, "swing 0 1102 2", 1);
    add_line(&model, L_ORDER, "swing 0 0 0", 1);
    add_line(&model, L_OTHER, "limit pulse_max_us 0 1101", 0);
    add_line(&model, L_OTHER, "limit pulse_max_us 0 1102", 0);
    add_line(&model, L_OTHER, "limit pulse_min_us 0 1101", 0);
    return run("servo", &model);
}

/* S6 for each limit by itself: smaller, equal, larger and 0, in every state; arm with the right and the wrong digest. */
static bool explore_limits(void)
{
    bool sound = true;
    for (int i = 0; i < W_LIMITS && sound; i++) {
        char text[4][40];
        struct model model = {.count = 0};
        add_common(&model);
        add_line(&model, L_ARM_WRONG, "", 0);
        add_line(&model, L_ORDER, "ramp 0 1 0", 1);
        add_line(&model, L_ORDER, "ramp 0 1 0", 0);
        const char *word = witness_limit_word((enum witness_limit)i);
        int32_t value = small_limits[i];
        for (int j = 0; j < 4; j++) {
            snprintf(text[j], sizeof text[j], "limit %s 0 %d", word, j == 3 ? 0 : value + j - 1);
            add_line(&model, L_OTHER, text[j], 0);
        }
        sound = run(word, &model);
    }
    return sound;
}

int main(int count, char **arguments)
{
    static const struct {
        const char *name;
        bool (*explore)(void);
    } models[] = {{"ceiling", explore_ceiling}, {"trips", explore_trips}, {"dwell", explore_dwell}, {"servo", explore_servo},
                  {"orders", explore_orders},   {"limits", explore_limits}, {"axis", explore_axis}};
    const char *wanted = count > 1 ? arguments[1] : "all";
    bool sound = true;
    bool known = false;
    states = calloc(STATES_MAX, sizeof *states);
    table = calloc(TABLE_SIZE, sizeof *table);
    if (states == NULL || table == NULL) {
        return 2;
    }
    if (count > 2) {
        most_states = (uint32_t)strtoul(arguments[2], NULL, 10);
    }
    for (size_t i = 0; i < sizeof models / sizeof models[0] && sound; i++) {
        bool quick = strcmp(wanted, "quick") == 0 && models[i].explore != explore_axis;
        if (quick || strcmp(wanted, "all") == 0 || strcmp(wanted, models[i].name) == 0) {
            known = true;
            sound = models[i].explore();
        }
    }
    if (!known) {
        fprintf(stderr, "no such model: %s\n", wanted);
        return 2;
    }
    printf("%llu ticks, %llu states met again and compared: %s\n", (unsigned long long)ticks_run,
           (unsigned long long)compared, sound ? "no clause broken" : "BROKEN");
    return sound ? 0 : 1;
}
