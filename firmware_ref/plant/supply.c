/* The supply and its bus capacitor; see supply.h. */
#include "supply.h"

#include <math.h>

void plant_supply_set_resistance(struct plant_supply *supply, double resistance_ohm)
{
    supply->resistance_ohm = resistance_ohm;
    supply->siemens = 1.0 / resistance_ohm;
    supply->feed_a = supply->volts * supply->siemens;
    supply->settled = false;
}

void plant_supply_start(struct plant_supply *supply, const struct plant_supply_parameters *parameters, uint32_t tick_us)
{
    supply->farad_per_tick = parameters->capacitance_f / (tick_us * 1e-6);
    supply->limit_a = parameters->current_limit_a;
    supply->ovp_v = parameters->ovp_v;
    supply->can_sink = parameters->can_sink > 0.0;
    supply->volts = parameters->volts;
    supply->standby_a = parameters->standby_ma / 1000.0;
    double idle_v = parameters->volts - parameters->resistance_ohm * supply->standby_a;
    supply->bus_v = idle_v > 0.0 ? idle_v : 0.0;
    supply->current_a = supply->standby_a;
    supply->shut_down = false;
    plant_supply_set_resistance(supply, parameters->resistance_ohm);
}

double plant_supply_step(struct plant_supply *supply, double load_a, double siemens)
{
    double before_v = supply->bus_v;
    double free_a = supply->farad_per_tick * before_v - load_a;
    double slope = supply->farad_per_tick + siemens;
    double given_a = 0.0;
    double bus_v = free_a / slope;
    if (!supply->shut_down) {
        bus_v = (free_a + supply->feed_a) / (slope + supply->siemens);
        given_a = supply->feed_a - supply->siemens * bus_v;
        if (given_a < 0.0 && !supply->can_sink) {
            given_a = 0.0;
            bus_v = free_a / slope;
        } else if (given_a > supply->limit_a) {
            given_a = supply->limit_a;
            bus_v = (free_a + given_a) / slope;
        }
        if (bus_v > supply->ovp_v) {
            supply->shut_down = true;
        }
    }
    if (bus_v < 0.0) {
        bus_v = 0.0;
    }
    supply->settled = fabs(bus_v - before_v) < 1e-9;
    supply->bus_v = bus_v;
    supply->current_a = given_a;
    return bus_v;
}
