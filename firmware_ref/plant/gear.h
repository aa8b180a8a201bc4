/* The gear's play and stops of the shafts; told in `ramprig.mock.plant.gear`. */
#ifndef RAMPRIG_PLANT_GEAR_H
#define RAMPRIG_PLANT_GEAR_H

#include "parameters.h"

struct plant_gear {
    double ratio;
    bool is_watched; /* there is an encoder on the output */
    bool linked;     /* asks for `plant_axis_follow` after each tick */
    /* Settings. */
    double play_rad; /* at the output, end to end */
    bool clamped;    /* the output is held fast */
    double low_rad;  /* of the motor's shaft, infinite where there is no stop */
    double high_rad;
    /* State. */
    double flank;   /* 1 or -1: at that one; 0: in the play */
    bool through;   /* the output's torques act on the motor */
    bool pressed;   /* the motor presses against a stop */
    double output_rad;
};

void plant_gear_start(struct plant_gear *gear, const struct plant_axis_parameters *parameters);

/* Takes over new settings, with the motor's shaft at this angle. */
void plant_gear_set(struct plant_gear *gear, double play_rad, bool clamped, double low_rad, double high_rad,
                    double angle_rad);

/* Lets the play grow; an output at its flank falls back by as much as is missing there. */
void plant_gear_widen(struct plant_gear *gear, double more_rad);

/* The output's angle, with the motor's shaft at this one. */
double plant_gear_output_rad(const struct plant_gear *gear, double angle_rad);

/* The angle to which stops hold a motor's shaft that wants to be at `angle_rad`; notes `pressed`. */
double plant_gear_hold(struct plant_gear *gear, double angle_rad, double push_nm);

/* Takes the output along and notes `through`; `weight` is the sign of a load that the output's friction cannot hold. */
void plant_gear_carry(struct plant_gear *gear, double angle_rad, double speed_rad_s, double current_a, double weight);

#endif
