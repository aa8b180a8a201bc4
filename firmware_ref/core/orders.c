/* The order queue and linear motion; see orders.h. */
#include "orders.h"

void rr_orders_add(struct rr_orders *orders, const struct rr_order *order, uint32_t now)
{
    uint8_t place = orders->count;
    while (place > 0 && orders->order[place - 1].start - now > order->start - now) {
        orders->order[place] = orders->order[place - 1];
        place--;
    }
    orders->order[place] = *order;
    orders->count++;
}

bool rr_orders_take_due(struct rr_orders *orders, uint32_t now, struct rr_order *due)
{
    if (orders->count == 0 || orders->order[0].start != now) {
        return false;
    }
    *due = orders->order[0];
    orders->count--;
    for (uint8_t i = 0; i < orders->count; i++) {
        orders->order[i] = orders->order[i + 1];
    }
    return true;
}

void rr_glide_begin(struct rr_glide *glide, const struct rr_order *order, int32_t goal)
{
    glide->down = goal < glide->value;
    uint32_t way = glide->down ? (uint32_t)(glide->value - goal) : (uint32_t)(goal - glide->value);
    glide->ticks = order->ticks;
    glide->left = order->ticks;
    glide->sum = 0;
    glide->tag = order->tag;
    glide->pending = true;
    if (order->ticks == 0) {
        glide->value = goal;
        return;
    }
    glide->whole = way / order->ticks; /* once an order, not once a tick */
    glide->part = way % order->ticks;
}

void rr_glide_step(struct rr_glide *glide)
{
    if (glide->left == 0) {
        return;
    }
    uint32_t step = glide->whole;
    glide->sum += glide->part;
    if (glide->sum >= glide->ticks) {
        glide->sum -= glide->ticks;
        step++;
    }
    glide->value = glide->down ? (int32_t)(glide->value - (int32_t)step) : (int32_t)(glide->value + (int32_t)step);
    glide->left--;
}

void rr_glide_end(struct rr_glide *glide, int32_t value)
{
    glide->value = value;
    glide->left = 0;
    glide->pending = false;
}
