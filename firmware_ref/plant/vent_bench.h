/* The vent drive's bench by name and value. Made by scripts/dev/generate_plant.py from VENT_BENCH in
 * ramprig.mock.plant.parameters; do not edit. Every figure is INVENTED. */
#ifndef RAMPRIG_PLANT_VENT_BENCH_H
#define RAMPRIG_PLANT_VENT_BENCH_H

#define PLANT_VENT_LIST(X) \
    X("supply.volts", 12.0) \
    X("supply.resistance_ohm", 0.15) \
    X("supply.capacitance_f", 0.001) \
    X("supply.can_sink", 0.0) \
    X("supply.ovp_v", 16.0) \
    X("supply.current_limit_a", 10.0) \
    X("supply.standby_ma", 35.0) \
    X("axis.0.motor.resistance_20_ohm", 2.4) \
    X("axis.0.motor.inductance_h", 0.0012) \
    X("axis.0.motor.constant_vs", 0.0195) \
    X("axis.0.motor.inertia_kgm2", 6e-06) \
    X("axis.0.motor.viscous_nms", 8e-07) \
    X("axis.0.motor.coulomb_nm", 0.0015) \
    X("axis.0.motor.static_nm", 0.0022) \
    X("axis.0.motor.thermal_resistance_k_w", 14.0) \
    X("axis.0.motor.thermal_time_s", 90.0) \
    X("axis.0.motor.ambient_c", 22.0) \
    X("axis.0.motor.gear_ratio", 90.0) \
    X("axis.0.motor.play_rad", 0.0) \
    X("axis.0.motor.output_friction_nm", 0.0) \
    X("axis.0.encoder.lines", 16.0) \
    X("axis.0.encoder.on_output", 0.0) \
    X("axis.0.bridge.resistance_ohm", 0.1) \
    X("axis.0.bridge.freewheel_drop_v", 1.4) \
    X("axis.0.sensor.offset_ma", 4.0) \
    X("axis.0.sensor.noise_ma", 6.0) \
    X("axis.0.sensor.range_ma", 12000.0) \
    X("axis.0.sensor.step_ma", 2.0) \
    X("servo.0.neutral_us", 1500.0) \
    X("servo.0.us_per_deg", 8.88888888888889) \
    X("servo.0.slew_deg_s", 300.0) \
    X("servo.0.dead_band_us", 5.0) \
    X("servo.0.stop_low_deg", -55.0) \
    X("servo.0.stop_high_deg", 55.0) \
    X("servo.0.idle_ma", 8.0) \
    X("servo.0.moving_ma", 160.0) \
    X("servo.0.stall_ma", 700.0) \
    X("axes", 1.0) \
    X("servos", 1.0)

#endif
