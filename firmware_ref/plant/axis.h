/* One motor axis: bridge, winding, shaft and friction, stepped a tick at a time; told in `ramprig.mock.plant.axis`. */
#ifndef RAMPRIG_PLANT_AXIS_H
#define RAMPRIG_PLANT_AXIS_H

#include "flow.h"
#include "gear.h"
#include "parameters.h"

/* What a turn of the output shaft adds, or what it has added so far; told in `ramprig.mock.plant.wear`. */
struct plant_wear {
    double friction;   /* share of the new motor's */
    double resistance; /* likewise */
    double play_rad;   /* at the output */
};

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
    double laden_nm; /* the load at the motor's shaft */
    bool jammed;
    struct plant_wear wear;
    bool restless; /* the load alone turns a shaft at rest */
    /* Worked out from the above. */
    struct plant_gear gear;
    struct plant_wear worn;
    double worn_at_rad;
    double load_motor_nm; /* the load and the friction of a turning shaft, as they act on the motor now */
    double running_nm;
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

/* After each tick of an axis whose gear is `linked`: holds a shaft that has run into a stop, takes the output along, and
 * sees what acts on the motor from now on. */
void plant_axis_follow(struct plant_axis *axis);

/* The output shaft's angle. */
double plant_axis_output_rad(const struct plant_axis *axis);

/* Lets the winding take up the heat of the last ticks. */
void plant_axis_warm(struct plant_axis *axis, uint32_t ticks);

/* The current as the bridge's sensor sees it. */
double plant_axis_bridge_current_a(const struct plant_axis *axis);

/* The winding's resistance at 20 degC, brushes included. */
void plant_axis_set_resistance(struct plant_axis *axis, double resistance_20_ohm);

/* The gear's lost motion at the output, end to end; whether the output is held fast; angles of the motor's shaft that it
 * cannot pass, infinite for none. */
void plant_axis_set_play(struct plant_axis *axis, double play_rad);
void plant_axis_set_clamped(struct plant_axis *axis, bool clamped);
void plant_axis_set_stops(struct plant_axis *axis, double low_rad, double high_rad);

/* What each turn of the output adds from now on; what it has added so far stays. */
void plant_axis_set_wear(struct plant_axis *axis, struct plant_wear wear);

/* Turns the motor's shaft from outside; one that is jammed does not turn. */
void plant_axis_turn_by_hand(struct plant_axis *axis, double radians);

/* Torque at the output shaft against positive motion. */
void plant_axis_set_load(struct plant_axis *axis, double load_nm);
void plant_axis_set_jammed(struct plant_axis *axis, bool jammed);
void plant_axis_set_leads_swapped(struct plant_axis *axis, bool swapped);

#endif
