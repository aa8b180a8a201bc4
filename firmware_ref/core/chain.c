/* The chain of one axis in a tick; see chain.h. */
#include "chain.h"

#include "seeded.h"

/*@ assigns \nothing;
    ensures \result == (duty > 0 ? 1 : duty < 0 ? -1 : 0); */
RR_APART static int8_t sign_of(int16_t duty)
{
    return (int8_t)((duty > 0) - (duty < 0));
}

/*@ requires -RR_DUTY_FULL <= duty <= RR_DUTY_FULL;
    assigns \nothing;
    ensures \result == rr_size(duty); */
static int16_t size_of(int16_t duty)
{
    return duty < 0 ? (int16_t)-duty : duty;
}

/*@ requires 0 <= ceiling <= RR_DUTY_FULL;
    assigns \nothing;
    ensures \result == (duty > ceiling ? ceiling : duty < -ceiling ? -ceiling : duty); */
static int16_t held_within(int16_t duty, int16_t ceiling)
{
    if (duty > ceiling) {
        return ceiling;
    }
    return RR_SEEDED(CEILING_ONE_SIDED, false, duty < -ceiling) ? (int16_t)-ceiling : duty;
}

/*@ assigns \nothing;
    ensures \result == rr_one_more(ticks); */
RR_APART static uint16_t one_more(uint16_t ticks)
{
    return ticks == UINT16_MAX ? ticks : (uint16_t)(ticks + 1u);
}

/* CHAIN-2: where t has the other sign, zero comes first. */
/*@ assigns \nothing;
    ensures \result == ((target > 0 && duty < 0) || (target < 0 && duty > 0) || target == 0 ? 0 : target); */
static int16_t next_target(int16_t duty, int16_t target)
{
    return sign_of(target) == -sign_of(duty) ? 0 : target;
}

/* CHAIN-2: from d towards a target of the same sign, growing by at most `up`, falling by at most `down`. */
/*@ requires -RR_DUTY_FULL <= duty <= RR_DUTY_FULL && -RR_DUTY_FULL <= wanted <= RR_DUTY_FULL;
    requires 1 <= up <= RR_DUTY_FULL && 1 <= down <= RR_DUTY_FULL;
    requires !(duty > 0 && wanted < 0) && !(duty < 0 && wanted > 0);
    assigns \nothing;
    ensures rr_size(\result) <= rr_size(duty) + up && rr_size(\result) >= rr_size(duty) - down;
    ensures rr_size(\result) <= rr_size(duty) || rr_size(\result) <= rr_size(wanted);
    ensures (duty > 0 || wanted > 0) ==> \result >= 0;
    ensures (duty < 0 || wanted < 0) ==> \result <= 0; */
static int16_t slewed(int16_t duty, int16_t wanted, int16_t up, int16_t down)
{
    int16_t size = size_of(duty);
    int16_t wanted_size = size_of(wanted);
    int8_t sign = duty != 0 ? sign_of(duty) : sign_of(wanted);
    if (wanted_size < size) {
        size = size - wanted_size > down ? (int16_t)(size - down) : wanted_size;
    } else if (wanted_size - size > up) {
        size = (int16_t)(size + RR_SEEDED(SLEW_DOUBLED, 2 * up, up));
    } else {
        size = wanted_size;
    }
    return (int16_t)(sign * size);
}

/* S3: may the bridge leave zero for this sign? */
/*@ requires \valid_read(chain) && \valid_read(limits);
    assigns \nothing;
    ensures \result <==> (sign == chain->last_sign || rr_rested(chain, limits)); */
static bool may_leave_zero(const struct rr_chain *chain, const struct rr_chain_limits *limits, int8_t sign)
{
    if (sign == chain->last_sign || RR_SEEDED(START_UNGUARDED, chain->last_sign == 0, false)) {
        return true;
    }
    return chain->zero_for >= limits->dwell_ticks &&
           RR_SEEDED(STANDSTILL_IGNORED, true, limits->sense == 0 || chain->still_for >= limits->still_ticks);
}

void rr_chain_watch(struct rr_chain *chain, const struct rr_chain_limits *limits, int32_t counts)
{
    int32_t away = (int32_t)((uint32_t)counts - (uint32_t)chain->mark);
    if (away > limits->still_counts || away < -(int32_t)limits->still_counts) {
        chain->mark = counts;
        chain->still_for = 0;
    } else {
        chain->still_for = one_more(chain->still_for);
    }
}

/*@ requires \valid(chain) && -RR_DUTY_FULL <= duty <= RR_DUTY_FULL && rr_chain_ok(chain);
    assigns chain->duty, chain->last_sign, chain->zero_for;
    ensures rr_chain_ok(chain) && chain->duty == duty;
    ensures chain->zero_for == (duty == 0 ? rr_one_more(\old(chain->zero_for)) : 0);
    ensures chain->last_sign == (duty > 0 ? 1 : duty < 0 ? -1 : \old(chain->last_sign)); */
RR_APART static void set_duty(struct rr_chain *chain, int16_t duty)
{
    bool resting = RR_SEEDED(DWELL_FROM_COMMAND, size_of(duty) < size_of(chain->duty), false) || duty == 0;
    if (resting) {
        chain->zero_for = one_more(chain->zero_for);
    } else {
        chain->zero_for = 0;
    }
    if (duty != 0) {
        chain->last_sign = sign_of(duty);
    }
    chain->duty = duty;
}

int16_t rr_chain_step(struct rr_chain *chain, const struct rr_chain_limits *limits, int16_t demand,
                      struct rr_chain_news *news)
{
    int16_t target = held_within(demand, limits->ceiling_duty);
    int16_t cut = held_within(chain->duty, limits->ceiling_duty);
    int16_t wanted = next_target(cut, target);
    int16_t duty = slewed(cut, wanted, limits->slew_up_duty, limits->slew_down_duty);
    news->at_ceiling = target != demand;
    news->at_slew = duty != wanted;
    news->locked = chain->duty == 0 && duty != 0 && !may_leave_zero(chain, limits, sign_of(duty));
    news->let_go = 0;
    if (news->locked) {
        duty = 0;
        chain->held_for = one_more(chain->held_for);
    } else if (chain->held_for != 0) {
        /* A demand of the other sign goes its own way: the lock is over without having let go. */
        news->let_go = duty != 0 && sign_of(duty) != chain->last_sign ? chain->held_for : 0;
        chain->held_for = 0;
    }
    news->settled = duty == demand;
    set_duty(chain, duty);
    return duty;
}

RR_APART void rr_chain_off(struct rr_chain *chain)
{
    chain->held_for = 0;
    set_duty(chain, 0);
}
