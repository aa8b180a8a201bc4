/* The step functions of the core on the same inputs as sim/steps.v, a tick a line, from standard input to standard output. */
#include "../../core/chain.h"
#include "../../core/guard.h"
#include "../../core/servo.h"

#include <stdio.h>

int main(void)
{
    struct rr_chain chain = {0};
    struct rr_guard guard = {0};
    int32_t pulse_ns = 0;
    int in[18];
    for (uint32_t tick = 1;; tick++) {
        for (int i = 0; i < 18; i++) {
            if (scanf("%d", &in[i]) != 1) {
                return 0;
            }
        }
        struct rr_chain_limits limits = {.ceiling_duty = (int16_t)in[5],
                                         .slew_up_duty = (int16_t)in[6],
                                         .slew_down_duty = (int16_t)in[7],
                                         .dwell_ticks = (uint16_t)in[8],
                                         .sense = (int8_t)in[9],
                                         .still_counts = (int16_t)in[10],
                                         .still_ticks = (uint16_t)in[11]};
        struct rr_guard_limits bounds = {.trip_ma = in[12], .trip_ticks = (uint16_t)in[13], .gain = 0, .thermal_s = 1};
        struct rr_servo_limits ends = {.least_ns = in[14], .greatest_ns = in[15], .home_ns = in[16], .slew_ns = in[17]};
        struct rr_chain_news news = {0};
        struct rr_finding finding = {0};
        rr_chain_watch(&chain, &limits, in[2]);
        rr_guard_step(&guard, &bounds, tick, chain.duty, in[2], in[3], &finding);
        if (in[0] != 0) {
            rr_chain_step(&chain, &limits, (int16_t)in[1], &news);
        } else {
            rr_chain_off(&chain);
        }
        if (in[0] == 0 || in[4] == 0) {
            pulse_ns = 0;
        } else {
            pulse_ns = pulse_ns == 0 ? rr_servo_first_ns(&ends) : rr_servo_step_ns(&ends, pulse_ns, in[4]);
        }
        printf("%d %d %d %d %d %d %d %ld\n", chain.duty, news.at_ceiling, news.at_slew, news.locked, news.let_go,
               finding.trip == RR_TRIP_OVERCURRENT, rr_guard_persists(&guard, &bounds, RR_TRIP_OVERCURRENT, in[3]),
               (long)pulse_ns);
    }
}
