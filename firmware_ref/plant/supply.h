/* The supply and the bus capacitor it feeds; told in `ramprig.mock.plant.supply`. */
#ifndef RAMPRIG_PLANT_SUPPLY_H
#define RAMPRIG_PLANT_SUPPLY_H

#include "parameters.h"

struct plant_supply {
    double bus_v;
    double current_a; /* what the supply itself gave in the last tick */
    double standby_a;
    bool shut_down; /* by over-voltage, for good */
    bool settled;   /* the bus did not move in the last tick */
    bool can_sink;
    double farad_per_tick;
    double limit_a;
    double ovp_v;
    double volts;
    double resistance_ohm;
    double siemens;
    double feed_a;
};

void plant_supply_start(struct plant_supply *supply, const struct plant_supply_parameters *parameters, uint32_t tick_us);

/* May be changed while running: a weak supply. */
void plant_supply_set_resistance(struct plant_supply *supply, double resistance_ohm);

/* One tick under loads that draw `load_a + siemens * bus`; returns the new bus voltage. */
double plant_supply_step(struct plant_supply *supply, double load_a, double siemens);

#endif
