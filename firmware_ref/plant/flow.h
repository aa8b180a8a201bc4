/* Exact steps of a linear two-state system over a tick and its halvings; the method is told in `ramprig.mock.plant.flow`. */
#ifndef RAMPRIG_PLANT_FLOW_H
#define RAMPRIG_PLANT_FLOW_H

#include <stdbool.h>

#define FLOW_HALVINGS 12
#define FLOW_UNITS    (1 << FLOW_HALVINGS) /* smallest steps in a tick */

/* Four rows of four factors, each for (current, speed, voltage, opposing torque) at the start of the step. The rows give
 * current `i`, speed `w`, the current's mean `m` over the step and the angle `a` turned, in A, rad/s, A and rad. */
struct flow_rows {
    double ii, iw, iv, it;
    double wi, ww, wv, wt;
    double mi, mw, mv, mt;
    double ai, aw, av, at;
};

/* By level: `rows[0]` is a whole tick, `rows[n]` its 2^n-th part. */
struct flow_ladder {
    struct flow_rows rows[FLOW_HALVINGS + 1];
};

/* Makes the rows. `system` is A by rows in 1/s, `per_volt` and `per_nm` the slopes of current and speed. False for a
 * system so stiff that nothing meaningful is left of it in a tick. */
bool flow_transitions(struct flow_ladder *ladder, const double system[4], double per_volt, double per_nm, double tick_s);

#endif
