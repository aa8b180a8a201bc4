/* The order queue and linear motion; see orders.h. */
#include "orders.h"

#include <stddef.h>

void rr_orders_add(struct rr_orders *orders, const struct rr_order *order, uint32_t now)
{
    uint8_t place = orders->count;
    while (place > 0 && orders->order[place - 1].start - now <= order->start - now) {
        orders->order[place] = orders->order[place - 1];
        place--;
    }
    orders->order[place] = *order;
    orders->count++;
}

const struct rr_order *rr_orders_take_due(struct rr_orders *orders, uint32_t now)
{
    if (orders->count == 0 || orders->order[orders->count - 1].start != now) {
        return NULL;
    }
    orders->count--;
    return &orders->order[orders->count];
}

/* floor(way / ticks) and the rest, ticks not 0: over the quotient's bits only, where a library's division takes all 32. */
static void divide(struct rr_glide *glide, RR_U24 way, uint32_t ticks)
{
    RR_U24 whole = 0;
    if (ticks <= way) {
        RR_U24 half = way >> 1;
        RR_U24 step = (RR_U24)ticks;
        RR_U24 bit = 1;
        while (step <= half) {
            step <<= 1;
            bit <<= 1;
        }
        for (; bit != 0; bit >>= 1, step >>= 1) {
            if (way >= step) {
                way -= step;
                whole |= bit;
            }
        }
    }
    glide->whole = whole;
    glide->part = way;
}

void rr_glide_begin(struct rr_glide *glide, const struct rr_order *order, RR_I24 goal)
{
    glide->down = goal < glide->value;
    RR_U24 way = (RR_U24)(glide->down ? glide->value - goal : goal - glide->value);
    glide->ticks = order->ticks;
    glide->left = order->ticks;
    glide->sum = 0;
    glide->tag = order->tag;
    glide->pending = true;
    if (order->ticks == 0) {
        glide->value = goal;
        return;
    }
    divide(glide, way, order->ticks);
}

void rr_glide_step(struct rr_glide *glide)
{
    if (glide->left == 0) {
        return;
    }
    RR_U24 step = glide->whole;
    glide->sum += glide->part;
    if (glide->sum >= glide->ticks) {
        glide->sum -= glide->ticks;
        step++;
    }
    glide->value = (RR_I24)(glide->down ? glide->value - (RR_I24)step : glide->value + (RR_I24)step);
    glide->left--;
}

RR_APART void rr_glide_end(struct rr_glide *glide, RR_I24 value)
{
    glide->value = value;
    glide->left = 0;
    glide->pending = false;
}
