/* One motor axis; see axis.h. Each expression is in the order of the Python form, so that both give the same counts. */
#include "axis.h"

#include <math.h>

#define MOST_EVENTS 16    /* changes of motion followed within one tick */
#define DRIFT       1e-3  /* change of resistance that makes new rows */
#define SPENT_A     1e-9
#define TAU         6.283185307179586

static bool is_zero(double value)
{
    return !(value < 0.0 || value > 0.0);
}

static bool is_off(const struct plant_axis *axis)
{
    return axis->duty == 0 && !axis->brake;
}

static void hold(struct plant_axis *axis)
{
    const struct plant_motor_parameters *motor = &axis->parameters->motor;
    bool through = axis->gear.through;
    double dragged_nm = through ? motor->output_friction_nm / motor->gear_ratio : 0.0;
    axis->load_motor_nm = through ? axis->laden_nm : 0.0;
    axis->running_nm = axis->coulomb_nm + dragged_nm;
    axis->stick_nm = axis->jammed || axis->gear.pressed ? (double)INFINITY : axis->static_nm + dragged_nm;
    axis->restless = fabs(axis->load_motor_nm) > axis->stick_nm;
}

/* Makes the rows anew for the resistance as it now is. */
static bool rebuild(struct plant_axis *axis)
{
    const struct plant_motor_parameters *motor = &axis->parameters->motor;
    double ohm = axis->resistance_20_ohm * plant_copper_factor(axis->winding_c) + axis->parameters->bridge.resistance_ohm;
    double per_h = 1.0 / motor->inductance_h;
    double per_j = 1.0 / motor->inertia_kgm2;
    double constant = motor->constant_vs;
    const double turning[4] = {-ohm * per_h, -constant * per_h, constant * per_j, -axis->viscous_nms * per_j};
    const double stuck[4] = {-ohm * per_h, 0.0, 0.0, 0.0};
    const double slack[4] = {0.0, 0.0, 0.0, -axis->viscous_nms * per_j};
    axis->resistance_ohm = ohm;
    hold(axis);
    return flow_transitions(&axis->turning, turning, per_h, -per_j, axis->tick_s) &&
           flow_transitions(&axis->stuck, stuck, per_h, 0.0, axis->tick_s) &&
           flow_transitions(&axis->slack, slack, 0.0, -per_j, axis->tick_s);
}

bool plant_axis_start(struct plant_axis *axis, const struct plant_axis_parameters *parameters, uint32_t tick_us)
{
    const struct plant_motor_parameters *motor = &parameters->motor;
    axis->parameters = parameters;
    axis->tick_s = tick_us * 1e-6;
    axis->duty = 0;
    axis->brake = false;
    axis->current_a = 0.0;
    axis->mean_a = 0.0;
    axis->speed_rad_s = 0.0;
    axis->angle_rad = 0.0;
    axis->drop_now_v = 0.0;
    axis->winding_c = motor->ambient_c;
    axis->free_a = 0.0;
    axis->siemens = 0.0;
    axis->surplus_a = 0.0;
    axis->heat_a2 = 0.0;
    axis->ratio = 0.0;
    axis->resistance_20_ohm = motor->resistance_20_ohm;
    axis->viscous_nms = motor->viscous_nms;
    axis->coulomb_nm = motor->coulomb_nm;
    axis->static_nm = motor->static_nm;
    axis->laden_nm = 0.0;
    axis->jammed = false;
    axis->wear = (struct plant_wear){0.0, 0.0, 0.0};
    axis->worn = (struct plant_wear){0.0, 0.0, 0.0};
    axis->worn_at_rad = 0.0;
    plant_gear_start(&axis->gear, parameters);
    axis->per_duty = 1.0 / PLANT_DUTY_FULL;
    return rebuild(axis);
}

double plant_axis_bridge_current_a(const struct plant_axis *axis)
{
    return axis->per_duty > 0.0 ? axis->current_a : -axis->current_a;
}

void plant_axis_set_resistance(struct plant_axis *axis, double resistance_20_ohm)
{
    axis->resistance_20_ohm = resistance_20_ohm;
    (void)rebuild(axis); /* a motor possible at the start is not made too stiff by what the faults set */
}

void plant_axis_set_load(struct plant_axis *axis, double load_nm)
{
    axis->laden_nm = load_nm / axis->parameters->motor.gear_ratio;
    hold(axis);
}

static void set_gear(struct plant_axis *axis, double play_rad, bool clamped, double low_rad, double high_rad)
{
    plant_gear_set(&axis->gear, play_rad, clamped, low_rad, high_rad, axis->angle_rad);
    hold(axis);
}

void plant_axis_set_play(struct plant_axis *axis, double play_rad)
{
    set_gear(axis, play_rad, axis->gear.clamped, axis->gear.low_rad, axis->gear.high_rad);
}

void plant_axis_set_clamped(struct plant_axis *axis, bool clamped)
{
    set_gear(axis, axis->gear.play_rad, clamped, axis->gear.low_rad, axis->gear.high_rad);
}

void plant_axis_set_stops(struct plant_axis *axis, double low_rad, double high_rad)
{
    set_gear(axis, axis->gear.play_rad, axis->gear.clamped, low_rad, high_rad);
}

void plant_axis_set_wear(struct plant_axis *axis, struct plant_wear wear)
{
    axis->wear = wear;
    axis->worn_at_rad = axis->angle_rad;
}

void plant_axis_turn_by_hand(struct plant_axis *axis, double radians)
{
    if (axis->jammed) {
        return;
    }
    axis->angle_rad += radians;
    if (axis->gear.linked) {
        plant_axis_follow(axis);
    }
}

double plant_axis_output_rad(const struct plant_axis *axis)
{
    return plant_gear_output_rad(&axis->gear, axis->angle_rad);
}

void plant_axis_follow(struct plant_axis *axis)
{
    struct plant_gear *gear = &axis->gear;
    bool was_through = gear->through;
    bool was_pressed = gear->pressed;
    const struct plant_motor_parameters *motor = &axis->parameters->motor;
    double held = plant_gear_hold(gear, axis->angle_rad, motor->constant_vs * axis->current_a - axis->load_motor_nm);
    if (gear->pressed || held < axis->angle_rad || held > axis->angle_rad) {
        axis->angle_rad = held;
        axis->speed_rad_s = 0.0;
    }
    bool light = fabs(axis->laden_nm) * gear->ratio <= motor->output_friction_nm;
    plant_gear_carry(gear, held, axis->speed_rad_s, axis->current_a, light ? 0.0 : copysign(1.0, axis->laden_nm));
    if (gear->through != was_through || gear->pressed != was_pressed) {
        hold(axis);
    }
}

void plant_axis_set_jammed(struct plant_axis *axis, bool jammed)
{
    axis->jammed = jammed;
    if (jammed) {
        axis->speed_rad_s = 0.0;
    }
    hold(axis);
}

void plant_axis_set_leads_swapped(struct plant_axis *axis, bool swapped)
{
    axis->per_duty = copysign(axis->per_duty, swapped ? -1.0 : 1.0);
}

/* The torque against a shaft that turns with this speed. */
static double opposing_nm(const struct plant_axis *axis, double speed)
{
    return axis->load_motor_nm + (speed > 0.0 ? axis->running_nm : -axis->running_nm);
}

/* The ratio with which a bridge that is off conducts through the whole tick, 0 if it does not. */
static double diodes(struct plant_axis *axis, double current, double speed, double bus_v)
{
    double drop_v = axis->parameters->bridge.freewheel_drop_v;
    double facing_v = bus_v + drop_v;
    double side;
    if (!is_zero(current)) {
        side = current > 0.0 ? -1.0 : 1.0;
        const struct flow_rows *rows = is_zero(speed) ? &axis->stuck.rows[0] : &axis->turning.rows[0];
        if ((rows->ii * current + rows->iw * speed + rows->iv * side * facing_v) * side >= 0.0) {
            return 0.0;
        }
    } else if (fabs(speed) * axis->parameters->motor.constant_vs > facing_v) {
        side = speed > 0.0 ? 1.0 : -1.0;
    } else {
        return 0.0;
    }
    axis->drop_now_v = side * drop_v;
    return side;
}

double plant_axis_prepare(struct plant_axis *axis, double bus_v)
{
    double speed = axis->speed_rad_s;
    double current = axis->current_a;
    if (axis->duty != 0) {
        axis->drop_now_v = 0.0;
        axis->ratio = axis->duty * axis->per_duty;
    } else {
        axis->ratio = axis->brake ? 0.0 : diodes(axis, current, speed, bus_v);
        if (is_zero(axis->ratio)) {
            return 0.0;
        }
    }
    const struct flow_rows *rows;
    if (!is_zero(speed)) {
        rows = &axis->turning.rows[0];
        axis->free_a = rows->mi * current + rows->mw * speed + rows->mt * opposing_nm(axis, speed) +
                       rows->mv * axis->drop_now_v;
    } else {
        rows = &axis->stuck.rows[0];
        axis->free_a = rows->mi * current + rows->mv * axis->drop_now_v;
    }
    axis->siemens = rows->mv;
    return axis->ratio;
}

/* How a bridge that is off ties the motor to the bus now: the ratio, and the motor's voltage by `volts`. */
static double freewheel(const struct plant_axis *axis, double bus_v, double *volts)
{
    double facing_v = bus_v + axis->parameters->bridge.freewheel_drop_v;
    double side;
    *volts = 0.0;
    if (!is_zero(axis->current_a)) {
        side = axis->current_a > 0.0 ? -1.0 : 1.0;
    } else if (fabs(axis->speed_rad_s) * axis->parameters->motor.constant_vs > facing_v) {
        side = axis->speed_rad_s > 0.0 ? 1.0 : -1.0;
    } else {
        return 0.0;
    }
    *volts = side * facing_v;
    return side;
}

/* The direction in which the shaft turns or is about to, 0 where it sticks. */
static double side_of(const struct plant_axis *axis)
{
    if (!is_zero(axis->speed_rad_s)) {
        return axis->speed_rad_s > 0.0 ? 1.0 : -1.0;
    }
    double push_nm = axis->parameters->motor.constant_vs * axis->current_a - axis->load_motor_nm;
    if (fabs(push_nm) > axis->stick_nm) {
        return push_nm > 0.0 ? 1.0 : -1.0;
    }
    return 0.0;
}

/* Follows one motion until it changes or `left` units are over; returns the units still left, and the charge in A times
 * units. The longest step that holds no change is taken first, then ever shorter ones. */
static int glide(struct plant_axis *axis, int left, double volts, bool off, double *passed)
{
    double current = axis->current_a;
    double speed = axis->speed_rad_s;
    double side = side_of(axis);
    bool open_circuit = off && is_zero(volts);
    *passed = 0.0;
    if (open_circuit && is_zero(side)) {
        return 0;
    }
    const struct flow_ladder *ladder = open_circuit ? &axis->slack : is_zero(side) ? &axis->stuck : &axis->turning;
    double torque = axis->load_motor_nm + side * axis->running_nm;
    double charge = 0.0;
    for (int level = 0; level < FLOW_HALVINGS + 2; level++) {
        /* One pass over the levels spells out `left` in binary, the last unit at its end being the change itself. */
        bool last = level > FLOW_HALVINGS;
        int size = last ? 1 : FLOW_UNITS >> level;
        if (size > left) {
            continue;
        }
        const struct flow_rows *rows = &ladder->rows[last ? FLOW_HALVINGS : level];
        double then = rows->ii * current + rows->iw * speed + rows->iv * volts + rows->it * torque;
        double speed_then = rows->wi * current + rows->ww * speed + rows->wv * volts + rows->wt * torque;
        double mean = rows->mi * current + rows->mw * speed + rows->mv * volts + rows->mt * torque;
        double turned = rows->ai * current + rows->aw * speed + rows->av * volts + rows->at * torque;
        bool spent = off && !open_circuit && then * volts >= 0.0;
        bool halted = !is_zero(side) && speed_then * side <= 0.0;
        bool loose = is_zero(side) &&
                     fabs(axis->parameters->motor.constant_vs * then - axis->load_motor_nm) > axis->stick_nm;
        if (!last && (spent || halted || loose)) {
            continue;
        }
        current = spent ? 0.0 : then;
        speed = halted || is_zero(side) ? 0.0 : speed_then;
        charge += mean * size;
        axis->angle_rad += turned;
        left -= size;
    }
    axis->current_a = current;
    axis->speed_rad_s = speed;
    *passed = charge;
    return left;
}

/* One tick in which the motion changes, from one change to the next. */
static void by_events(struct plant_axis *axis, double bus_v)
{
    int left = FLOW_UNITS;
    double charge = 0.0;
    double drawn = 0.0;
    bool off = is_off(axis);
    for (int event = 0; event < MOST_EVENTS && left != 0; event++) {
        double ratio = axis->ratio;
        double volts = axis->ratio * bus_v;
        if (off) {
            ratio = freewheel(axis, bus_v, &volts);
        }
        double passed_a;
        left = glide(axis, left, volts, off, &passed_a);
        charge += passed_a;
        drawn += ratio * passed_a;
    }
    if (left != 0) {
        axis->speed_rad_s = 0.0;
        axis->current_a = 0.0;
    }
    double foretold_a = is_zero(axis->ratio) ? 0.0 : axis->free_a + axis->siemens * axis->ratio * bus_v;
    axis->mean_a = charge / FLOW_UNITS;
    axis->surplus_a += drawn / FLOW_UNITS - axis->ratio * foretold_a;
    axis->heat_a2 += axis->mean_a * axis->mean_a;
}

/* One tick with the circuit open and the shaft turning. */
static void coast(struct plant_axis *axis, double speed, double bus_v)
{
    const struct flow_rows *rows = &axis->slack.rows[0];
    double torque = opposing_nm(axis, speed);
    double then = rows->ww * speed + rows->wt * torque;
    if (then * speed <= 0.0) {
        by_events(axis, bus_v);
        return;
    }
    axis->angle_rad += rows->aw * speed + rows->at * torque;
    axis->speed_rad_s = then;
}

/* One tick with the winding connected and the shaft turning; false where the motion changes. */
static bool turn(struct plant_axis *axis, double volts, bool off)
{
    double current = axis->current_a;
    double speed = axis->speed_rad_s;
    const struct flow_rows *rows = &axis->turning.rows[0];
    double torque = opposing_nm(axis, speed);
    double then = rows->ii * current + rows->iw * speed + rows->iv * volts + rows->it * torque;
    double speed_then = rows->wi * current + rows->ww * speed + rows->wv * volts + rows->wt * torque;
    if (speed_then * speed <= 0.0 || (off && then * volts >= 0.0)) {
        return false;
    }
    axis->angle_rad += rows->ai * current + rows->aw * speed + rows->av * volts + rows->at * torque;
    axis->speed_rad_s = speed_then;
    axis->mean_a = rows->mi * current + rows->mw * speed + rows->mv * volts + rows->mt * torque;
    axis->current_a = then;
    return true;
}

/* One tick with the winding connected and the shaft stuck; false where the motion changes. */
static bool stick(struct plant_axis *axis, double volts, bool off)
{
    double current = axis->current_a;
    const struct flow_rows *rows = &axis->stuck.rows[0];
    double then = rows->ii * current + rows->iv * volts;
    double push_nm = axis->parameters->motor.constant_vs * then - axis->load_motor_nm;
    if (fabs(push_nm) > axis->stick_nm || (off && then * volts >= 0.0)) {
        return false;
    }
    if (is_zero(volts) && -SPENT_A < then && then < SPENT_A) {
        then = 0.0;
    }
    axis->mean_a = rows->mi * current + rows->mv * volts;
    axis->current_a = then;
    return true;
}

void plant_axis_advance(struct plant_axis *axis, double bus_v)
{
    bool off = is_off(axis);
    if (off && is_zero(axis->ratio)) {
        if (!is_zero(axis->current_a) || axis->restless) {
            by_events(axis, bus_v);
            return;
        }
        axis->mean_a = 0.0;
        if (!is_zero(axis->speed_rad_s)) {
            coast(axis, axis->speed_rad_s, bus_v);
        }
        return;
    }
    double volts = is_zero(axis->ratio) ? 0.0 : axis->ratio * bus_v + axis->drop_now_v;
    bool smooth = is_zero(axis->speed_rad_s) ? stick(axis, volts, off) : turn(axis, volts, off);
    if (!smooth) {
        by_events(axis, bus_v);
        return;
    }
    axis->heat_a2 += axis->mean_a * axis->mean_a;
}

/* Adds the wear of the way turned since the last time. */
static void wear_on(struct plant_axis *axis)
{
    const struct plant_motor_parameters *motor = &axis->parameters->motor;
    const struct plant_wear *wear = &axis->wear;
    double turns = fabs(axis->angle_rad - axis->worn_at_rad) / (TAU * axis->gear.ratio);
    axis->worn_at_rad = axis->angle_rad;
    if (is_zero(turns)) {
        return;
    }
    axis->worn.friction += wear->friction * turns;
    axis->worn.resistance += wear->resistance * turns;
    axis->worn.play_rad += wear->play_rad * turns;
    axis->coulomb_nm += motor->coulomb_nm * wear->friction * turns;
    axis->static_nm += motor->static_nm * wear->friction * turns;
    axis->resistance_20_ohm += motor->resistance_20_ohm * wear->resistance * turns;
    if (wear->play_rad > 0.0 && !axis->gear.linked) {
        plant_axis_set_play(axis, wear->play_rad * turns);
    } else if (wear->play_rad > 0.0) {
        plant_gear_widen(&axis->gear, wear->play_rad * turns);
    }
    hold(axis);
}

void plant_axis_warm(struct plant_axis *axis, uint32_t ticks)
{
    const struct plant_motor_parameters *motor = &axis->parameters->motor;
    if (axis->wear.friction > 0.0 || axis->wear.resistance > 0.0 || axis->wear.play_rad > 0.0) {
        wear_on(axis);
    }
    double ohm = axis->resistance_20_ohm * plant_copper_factor(axis->winding_c);
    double final_c = motor->ambient_c + motor->thermal_resistance_k_w * ohm * axis->heat_a2 / ticks;
    axis->heat_a2 = 0.0;
    double kept = exp(-(double)ticks * axis->tick_s / motor->thermal_time_s);
    axis->winding_c = final_c + (axis->winding_c - final_c) * kept;
    ohm = axis->resistance_20_ohm * plant_copper_factor(axis->winding_c) + axis->parameters->bridge.resistance_ohm;
    if (fabs(ohm - axis->resistance_ohm) > DRIFT * axis->resistance_ohm) {
        (void)rebuild(axis); /* it was possible at the start, and copper moves far less than the bound */
    }
}
