/* One motor axis: bridge, winding, shaft and friction, stepped a tick at a time; told in `ramprig.mock.plant.axis`. */
#ifndef RAMPRIG_PLANT_AXIS_H
#define RAMPRIG_PLANT_AXIS_H

#include "flow.h"
#include "parameters.h"

struct plant_axis {
    const struct plant_axis_parameters *parameters;
    /* Drive. */
    int32_t duty; /* 1/10000 */
    bool brake;   /* at zero duty: true shorts the winding, false leaves it open */
    /* State. */
    double current_a;
    double mean_a; /* of the last tick */
    double speed_rad_s;
    double angle_rad; /* motor shaft, unbounded */
    double winding_c;
    /* Between the axis and the bus. */
    double free_a;
    double siemens;
    double surplus_a;
    /* May be changed while running, by the functions below. */
    double resistance_20_ohm;
    double viscous_nms;
    double coulomb_nm;
    double static_nm;
    double load_motor_nm; /* at the motor's shaft */
    bool jammed;
    bool restless; /* the load alone turns a shaft at rest */
    /* Worked out from the above. */
    double per_duty;
    double ratio;
    double drop_now_v;
    double heat_a2;
    double resistance_ohm;
    double stick_nm;
    double tick_s;
    struct flow_ladder turning;
    struct flow_ladder stuck;
    struct flow_ladder slack;
};

/* Makes it at rest. The parameters must outlive it. False for a motor beyond simulation (flow.h). */
bool plant_axis_start(struct plant_axis *axis, const struct plant_axis_parameters *parameters, uint32_t tick_us);

/* The ratio of motor to bus voltage for the coming tick, 0 when the bus does not drive the motor. With a ratio, the
 * motor current's mean will be `free_a + siemens * ratio * bus`, and the bus carries ratio times that. */
double plant_axis_prepare(struct plant_axis *axis, double bus_v);

/* One tick at this bus voltage, after `plant_axis_prepare`. */
void plant_axis_advance(struct plant_axis *axis, double bus_v);

/* Lets the winding take up the heat of the last ticks. */
void plant_axis_warm(struct plant_axis *axis, uint32_t ticks);

/* The current as the bridge's sensor sees it. */
double plant_axis_bridge_current_a(const struct plant_axis *axis);

/* The winding's resistance at 20 degC, brushes included. */
void plant_axis_set_resistance(struct plant_axis *axis, double resistance_20_ohm);

/* Torque at the output shaft against positive motion. */
void plant_axis_set_load(struct plant_axis *axis, double load_nm);
void plant_axis_set_jammed(struct plant_axis *axis, bool jammed);
void plant_axis_set_leads_swapped(struct plant_axis *axis, bool swapped);

#endif
