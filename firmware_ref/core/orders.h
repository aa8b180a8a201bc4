/* The order queue and the linear motion an order asks for (SPEC ORDER-1 to ORDER-8). */
#ifndef RAMPRIG_ORDERS_H
#define RAMPRIG_ORDERS_H

#include "config.h"

#include <stdbool.h>
#include <stdint.h>

enum rr_order_kind { RR_ORDER_RAMP, RR_ORDER_SWING, RR_ORDER_REST };

struct rr_order {
    uint32_t start;
    uint32_t ticks;
    int16_t value; /* duty; pulse in us; mode */
    uint8_t kind_index; /* index to the low four bits, kind above */
    uint8_t tag;
};

/* Sorted by start, equal starts in order of arrival; the next is the last in the array. */
struct rr_orders {
    struct rr_order order[RR_QUEUE];
    uint8_t count;
};

/* Puts an order in its place. The queue must not be full; `now` settles which start comes first over the wrap. */
void rr_orders_add(struct rr_orders *orders, const struct rr_order *order, uint32_t now);

/* Takes out the next order if it starts at this tick, else NULL; it stays where it is until another is added. */
/*@ requires \valid(orders) && orders->count <= RR_QUEUE;
    assigns orders->count;
    behavior due:
      assumes orders->count > 0 && orders->order[orders->count - 1].start == now;
      ensures ORDER_3_next: orders->count == \old(orders->count) - 1 && \result == &orders->order[orders->count];
    behavior none:
      assumes orders->count == 0 || orders->order[orders->count - 1].start != now;
      ensures \result == \null && orders->count == \old(orders->count);
    complete behaviors;
    disjoint behaviors;
*/
const struct rr_order *rr_orders_take_due(struct rr_orders *orders, uint32_t now);

/* Values and goals of glides are inside this: pulses of 2600 us in ns, duties of 10000. */
#define RR_WAY_MAX 2600000

/* A value on its way: at tick T + k it is d + s floor(|D - d| k / n), without a division in the tick (SPEC ORDER-4). */
struct rr_glide {
    RR_I24 value;   /* duty or ns */
    RR_U24 whole;   /* floor(|D - d| / n) */
    RR_U24 part;    /* |D - d| mod n */
    uint32_t sum;   /* running sum of parts, below n */
    uint32_t ticks; /* n */
    uint32_t left;  /* ticks to go; 0 = at the goal */
    uint8_t tag;    /* of the order */
    bool down;      /* the goal lies below */
    bool pending;   /* its `done` has not been sent */
};

/*@ predicate rr_glide_ok(struct rr_glide *g) =
      -RR_WAY_MAX <= g->value <= RR_WAY_MAX && g->left <= g->ticks <= RR_HORIZON_TICKS &&
      (g->left > 0 ==> g->whole <= 2 * RR_WAY_MAX && g->part < g->ticks && g->sum < g->ticks);

    // the way of a tick: the whole part, and one more where the parts have come to one
    logic integer rr_stride(struct rr_glide *g) = g->sum + g->part >= g->ticks ? g->whole + 1 : g->whole;
*/

/* Begins an order's glide from the present value to `goal` at this tick (k = 0). */
void rr_glide_begin(struct rr_glide *glide, const struct rr_order *order, RR_I24 goal);

/* Moves the glide on by one tick. */
/*@ requires \valid(glide) && rr_glide_ok(glide);
    assigns glide->value, glide->sum, glide->left;
    behavior on_its_way:
      assumes glide->left > 0;
      ensures glide->left == \old(glide->left) - 1;
      ensures ORDER_4_value: glide->value == \old(glide->value) +
                             (glide->down ? -\old(rr_stride(glide)) : \old(rr_stride(glide)));
      ensures ORDER_4_sum: glide->sum == \old(glide->sum) + glide->part -
                           (\old(glide->sum) + glide->part >= glide->ticks ? glide->ticks : 0);
      ensures glide->sum < glide->ticks;
    behavior at_its_goal:
      assumes glide->left == 0;
      ensures glide->value == \old(glide->value) && glide->sum == \old(glide->sum) && glide->left == 0;
    complete behaviors;
    disjoint behaviors;
*/
void rr_glide_step(struct rr_glide *glide);

/* Ends the glide: it rests at `value`, nothing is pending. */
/*@ requires \valid(glide) && rr_glide_ok(glide) && -RR_WAY_MAX <= value <= RR_WAY_MAX;
    assigns glide->value, glide->left, glide->pending;
    ensures rr_glide_ok(glide) && glide->value == value && glide->left == 0 && !glide->pending;
*/
void rr_glide_end(struct rr_glide *glide, RR_I24 value);

#endif
