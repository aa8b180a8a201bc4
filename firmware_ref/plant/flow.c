/* Exact steps of a linear two-state system; see flow.h. Each expression is in the order of the Python form. */
#include "flow.h"

#include <math.h>

#define TERMS    16
#define STIFFEST 1e15

struct matrix {
    double a, b, c, d;
};

static struct matrix times(struct matrix p, struct matrix q)
{
    return (struct matrix){p.a * q.a + p.b * q.c, p.a * q.b + p.b * q.d, p.c * q.a + p.d * q.c, p.c * q.b + p.d * q.d};
}

static struct matrix sum(struct matrix p, double x, struct matrix q, double y)
{
    return (struct matrix){x * p.a + y * q.a, x * p.b + y * q.b, x * p.c + y * q.c, x * p.d + y * q.d};
}

/* F = e^(Ah) - 1, S = integral of e^(As) and W = integral of S over a step. */
struct flow {
    struct matrix f, s, w;
};

/* For a step in which the system hardly moves, by Horner's rule. */
static struct flow series(struct matrix system, double step_s)
{
    const struct matrix one = {1.0, 0.0, 0.0, 1.0};
    struct matrix total = one;
    for (int n = TERMS; n > 2; n--) {
        total = sum(one, 1.0, times(system, total), step_s / n);
    }
    struct matrix second = sum(total, step_s * step_s / 2.0, total, 0.0);
    struct matrix first = sum(one, step_s, times(system, second), 1.0);
    return (struct flow){times(system, first), first, second};
}

static struct flow doubled(struct flow flow, double step_s)
{
    struct flow twice;
    twice.w = sum(sum(flow.w, 2.0, flow.s, step_s), 1.0, times(flow.f, flow.w), 1.0);
    twice.s = sum(flow.s, 2.0, times(flow.f, flow.s), 1.0);
    twice.f = sum(flow.f, 2.0, times(flow.f, flow.f), 1.0);
    return twice;
}

static struct flow_rows rows_of(struct flow flow, double step_s, double per_volt, double per_nm)
{
    struct matrix f = flow.f;
    struct matrix s = flow.s;
    struct matrix w = flow.w;
    return (struct flow_rows){
        1.0 + f.a,    f.b,          s.a * per_volt,          s.b * per_nm,
        f.c,          1.0 + f.d,    s.c * per_volt,          s.d * per_nm,
        s.a / step_s, s.b / step_s, w.a * per_volt / step_s, w.b * per_nm / step_s,
        s.c,          s.d,          w.c * per_volt,          w.d * per_nm,
    };
}

bool flow_transitions(struct flow_ladder *ladder, const double system[4], double per_volt, double per_nm, double tick_s)
{
    struct matrix a = {system[0], system[1], system[2], system[3]};
    double upper = fabs(a.a) + fabs(a.b);
    double lower = fabs(a.c) + fabs(a.d);
    double size = (upper > lower ? upper : lower) * tick_s;
    if (!(size < STIFFEST)) {
        return false;
    }
    int exponent;
    (void)frexp(size, &exponent);
    int doublings = 2 + exponent > FLOW_HALVINGS ? 2 + exponent : FLOW_HALVINGS;
    double step_s = ldexp(tick_s, -doublings);
    struct flow flow = series(a, step_s);
    for (int level = doublings; level >= 0; level--) {
        if (level <= FLOW_HALVINGS) {
            ladder->rows[level] = rows_of(flow, step_s, per_volt, per_nm);
        }
        flow = doubled(flow, step_s);
        step_s *= 2.0;
    }
    return true;
}
