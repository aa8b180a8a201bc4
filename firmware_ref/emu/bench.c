/* What is at the chip's pins; see bench.h. */
#include "bench.h"

#include <simavr/sim_cycle_timers.h>

#include <string.h>

#define STEP_CYCLES (BENCH_STEP_US * CYCLES_A_US)
#define WATCH_CYCLES 160u /* 10 us: how finely the bridge is watched after a mark */

/* What the parts of ports/atmega328p/board.h make of current and supply, in uV at the pins. */
static uint32_t current_pin_uv(int32_t current_ma)
{
    int32_t pin = 2500000 + current_ma * 185;
    return pin < 0 ? 0u : (uint32_t)pin;
}

static uint32_t supply_pin_uv(uint32_t supply_mv)
{
    return (uint32_t)(supply_mv * UINT64_C(10000) / 43u);
}

/* One edge of the encoder, then the next one in equal distance until the step's end. */
static avr_cycle_count_t next_edge(avr_t *avr, avr_cycle_count_t when, void *param)
{
    struct bench *bench = param;
    (void)avr;
    int32_t left = (int32_t)(bench->target - bench->counts);
    if (left == 0) {
        return 0;
    }
    bench->counts += left > 0 ? 1u : (uint32_t)-1;
    if (!bench->lost_encoder) {
        chip_set_encoder(bench->chip, bench->counts);
    }
    uint32_t many = (uint32_t)(left > 0 ? left : -left);
    return many == 1 ? 0 : when + STEP_CYCLES / (many + 1u);
}

static void turn_to(struct bench *bench, uint32_t target)
{
    avr_t *avr = bench->chip->avr;
    int32_t left = (int32_t)(target - bench->counts);
    bench->target = target;
    avr_cycle_timer_cancel(avr, next_edge, bench);
    if (left != 0) {
        uint32_t many = (uint32_t)(left > 0 ? left : -left);
        avr_cycle_timer_register(avr, STEP_CYCLES / (many + 1u) + 1u, next_edge, bench);
    }
}

static void step_plant(struct bench *bench, const struct chip_outputs *outputs)
{
    struct plant *plant = &bench->plant;
    plant->axis[0].duty = outputs->duty;
    plant->axis[0].brake = outputs->brake;
    for (uint8_t i = 0; i < plant->parameters.servos; i++) {
        plant_servo_set_pulse(&plant->servo[i], outputs->pulse_half_us[i] / 2.0);
    }
    plant_step(plant);
    turn_to(bench, (uint32_t)plant_read_counts(plant, 0));
    int32_t supply_mv = plant_read_supply_mv(plant);
    chip_set_current_pin(bench->chip, current_pin_uv(plant_read_current_ma(plant, 0)));
    chip_set_supply_pin(bench->chip, supply_pin_uv(supply_mv < 0 ? 0u : (uint32_t)supply_mv));
}

static void step_script(struct bench *bench)
{
    bench->target_micro += bench->rate_micro;
    int64_t whole = bench->target_micro / 1000000;
    turn_to(bench, (uint32_t)whole);
    chip_set_current_pin(bench->chip, current_pin_uv(bench->current_ma));
    chip_set_supply_pin(bench->chip, supply_pin_uv(bench->supply_mv));
}

static avr_cycle_count_t step(avr_t *avr, avr_cycle_count_t when, void *param)
{
    struct bench *bench = param;
    struct chip_outputs outputs;
    (void)avr;
    chip_outputs(bench->chip, &outputs);
    bench->was_driven_twice = bench->was_driven_twice || outputs.both_driven;
    if (bench->kind == BENCH_PLANT) {
        step_plant(bench, &outputs);
    } else {
        step_script(bench);
    }
    return when + STEP_CYCLES;
}

static avr_cycle_count_t watch(avr_t *avr, avr_cycle_count_t when, void *param)
{
    struct bench *bench = param;
    struct chip_outputs outputs;
    chip_outputs(bench->chip, &outputs);
    if (outputs.enabled) {
        return when + WATCH_CYCLES;
    }
    bench->marked = false;
    bench->worst_off_cycles = avr->cycle - bench->mark_cycle;
    return 0;
}

bool bench_begin(struct bench *bench, struct chip *chip, const struct plant_parameters *parameters, uint64_t seed)
{
    memset(bench, 0, sizeof *bench);
    bench->chip = chip;
    bench->kind = BENCH_PLANT;
    if (parameters->axes != 1 || parameters->servos > CHIP_SERVOS ||
        !plant_start(&bench->plant, parameters, BENCH_STEP_US, seed)) {
        return false;
    }
    bench_after_reset(bench);
    return true;
}

void bench_script(struct bench *bench, int32_t counts_per_s, int32_t current_ma, uint32_t supply_mv)
{
    if (bench->kind != BENCH_SCRIPT) {
        bench->kind = BENCH_SCRIPT;
        bench->target_micro = (int64_t)(int32_t)bench->counts * 1000000;
    }
    bench->rate_micro = (int64_t)counts_per_s * BENCH_STEP_US;
    bench->current_ma = current_ma;
    bench->supply_mv = supply_mv;
}

void bench_after_reset(struct bench *bench)
{
    avr_t *avr = bench->chip->avr;
    chip_set_encoder(bench->chip, bench->counts);
    avr_cycle_timer_cancel(avr, step, bench);
    avr_cycle_timer_register(avr, STEP_CYCLES, step, bench);
}

void bench_mark(struct bench *bench)
{
    bench->mark_cycle = bench->chip->avr->cycle;
    bench->marked = true;
    avr_cycle_timer_cancel(bench->chip->avr, watch, bench);
    avr_cycle_timer_register(bench->chip->avr, WATCH_CYCLES, watch, bench);
}
