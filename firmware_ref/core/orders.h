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
const struct rr_order *rr_orders_take_due(struct rr_orders *orders, uint32_t now);

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

/* Begins an order's glide from the present value to `goal` at this tick (k = 0). */
void rr_glide_begin(struct rr_glide *glide, const struct rr_order *order, RR_I24 goal);

/* Moves the glide on by one tick. */
void rr_glide_step(struct rr_glide *glide);

/* Ends the glide: it rests at `value`, nothing is pending. */
void rr_glide_end(struct rr_glide *glide, RR_I24 value);

#endif
