/* Play and stops; see gear.h. Each expression is in the order of the Python form. */
#include "gear.h"

#include <math.h>

static bool is_zero(double value)
{
    return !(value < 0.0 || value > 0.0);
}

void plant_gear_start(struct plant_gear *gear, const struct plant_axis_parameters *parameters)
{
    gear->ratio = parameters->motor.gear_ratio;
    gear->is_watched = parameters->encoder.on_output > 0.0;
    gear->play_rad = parameters->motor.play_rad;
    gear->clamped = false;
    gear->low_rad = -(double)INFINITY;
    gear->high_rad = (double)INFINITY;
    gear->linked = gear->play_rad > 0.0 || gear->is_watched;
    gear->flank = 0.0;
    gear->through = !(gear->play_rad > 0.0);
    gear->pressed = false;
    gear->output_rad = 0.0;
}

void plant_gear_set(struct plant_gear *gear, double play_rad, bool clamped, double low_rad, double high_rad,
                    double angle_rad)
{
    if (!gear->linked) {
        gear->output_rad = angle_rad / gear->ratio;
    }
    gear->play_rad = play_rad;
    gear->clamped = clamped;
    gear->low_rad = low_rad;
    gear->high_rad = high_rad;
    bool stopped = low_rad > -(double)INFINITY || high_rad < (double)INFINITY;
    gear->linked = play_rad > 0.0 || clamped || gear->is_watched || stopped;
    gear->flank = 0.0;
    gear->through = !(play_rad > 0.0 || clamped);
    gear->pressed = false;
}

void plant_gear_widen(struct plant_gear *gear, double more_rad)
{
    gear->play_rad += more_rad;
    gear->output_rad -= gear->flank * more_rad / 2.0;
}

double plant_gear_output_rad(const struct plant_gear *gear, double angle_rad)
{
    return gear->linked ? gear->output_rad : angle_rad / gear->ratio;
}

double plant_gear_hold(struct plant_gear *gear, double angle_rad, double push_nm)
{
    double low = gear->low_rad;
    double high = gear->high_rad;
    if (gear->clamped) {
        low = fmax(low, gear->ratio * (gear->output_rad - gear->play_rad / 2.0));
        high = fmin(high, gear->ratio * (gear->output_rad + gear->play_rad / 2.0));
    }
    double held = fmin(fmax(angle_rad, low), high);
    gear->pressed = (held >= high && push_nm > 0.0) || (held <= low && push_nm < 0.0);
    return held;
}

void plant_gear_carry(struct plant_gear *gear, double angle_rad, double speed_rad_s, double current_a, double weight)
{
    if (gear->clamped) {
        gear->through = false;
        return;
    }
    double geared = angle_rad / gear->ratio;
    if (!(gear->play_rad > 0.0)) {
        gear->output_rad = geared;
        gear->through = true;
        return;
    }
    double half = gear->play_rad / 2.0;
    double ahead = geared - gear->output_rad;
    bool touches = !(-half < ahead && ahead < half);
    bool weighs = !is_zero(weight);
    if (weighs) {
        gear->flank = weight;
    } else if (touches) {
        gear->flank = ahead >= half ? 1.0 : -1.0;
    } else if (!is_zero(speed_rad_s)) {
        gear->flank = 0.0;
    }
    if (weighs || touches) {
        gear->output_rad = geared - gear->flank * half;
    }
    gear->through = weighs || gear->flank * (is_zero(speed_rad_s) ? current_a : speed_rad_s) > 0.0;
}
