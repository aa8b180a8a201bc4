// The chain of one axis: demand, ceiling, slew, dwell lock, duty at the bridge (SPEC.md section 12, S1 to S3, CHAIN-1 to -4).
//
// Does: one step with each `tick`, equal to rr_chain_step of firmware_ref/core/chain.c (to rr_chain_off where `on` is low).
// Does not: judge limits (a ceiling above MAX_DUTY is held at it), nor standstill (rr_standstill.v); not make pulses (rr_bridge.v).
// Latency: the outputs are those of the tick from one clock after `tick` on.
// Properties, under FORMAL: S1, S2, S3 by induction; a reversal, a lock and its letting go are covered.
`default_nettype none

module rr_chain #(
    parameter [13:0] MAX_DUTY = 14'd10000 // the board's own greatest duty, in 1/10000
) (
    input  wire               clk,
    input  wire               rst,

    input  wire               tick,
    input  wire               on,             // low: the outputs are off, the tick ends at zero
    input  wire signed [14:0] demand,         // in 1/10000
    input  wire               still,          // the shaft is at standstill, or has no encoder

    input  wire        [13:0] ceiling_duty,
    input  wire        [13:0] slew_up_duty,   // at least 1
    input  wire        [13:0] slew_down_duty, // at least 1
    input  wire        [15:0] dwell_ticks,

    output reg  signed [14:0] duty,
    output reg                at_ceiling,
    output reg                at_slew,
    output reg                dwell_lock,
    output reg         [15:0] let_go_ticks    // in the tick in which a lock let go, how long it had held; else 0
);
    reg        moved_yet;     // the bridge has left zero since start
    reg        last_negative; // the sign it had then
    reg [15:0] zero_ticks;    // ticks ended at zero, held at 65535
    reg [15:0] held_ticks;    // ticks for which the lock has held, held at 65535

    function signed [14:0] held_within(input signed [14:0] value, input [13:0] bound);
        if (value > $signed({1'b0, bound})) held_within = $signed({1'b0, bound});
        else if (value < -$signed({1'b0, bound})) held_within = -$signed({1'b0, bound});
        else held_within = value;
    endfunction

    function [13:0] size_of(input signed [14:0] value); // |value| is at most MAX_DUTY
        reg signed [14:0] size;
        begin
            size = value < 0 ? -value : value;
            size_of = size[13:0];
        end
    endfunction

    function [15:0] one_more(input [15:0] ticks);
        one_more = ticks == 16'hffff ? ticks : ticks + 16'd1;
    endfunction

    // CHAIN-1
    wire        [13:0] ceiling = ceiling_duty > MAX_DUTY ? MAX_DUTY : ceiling_duty;
    wire signed [14:0] target  = held_within(demand, ceiling);
    wire signed [14:0] cut     = held_within(duty, ceiling);

    // CHAIN-2
    wire               crossing = (target > 0 && cut < 0) || (target < 0 && cut > 0);
    wire signed [14:0] wanted   = crossing ? 15'sd0 : target;
    wire        [13:0] size     = size_of(cut);
    wire        [13:0] wanted_size = size_of(wanted);
    wire        [13:0] fall     = size - wanted_size;
    wire        [13:0] rise     = wanted_size - size;
    wire        [13:0] next_size = wanted_size < size
        ? (fall > slew_down_duty ? size - slew_down_duty : wanted_size)
        : (rise > slew_up_duty ? size + slew_up_duty : wanted_size);
    wire               negative = cut != 0 ? cut < 0 : wanted < 0;
    wire signed [14:0] slewed   = negative ? -$signed({1'b0, next_size}) : $signed({1'b0, next_size});

    // CHAIN-3
    wire same_sign = moved_yet && last_negative == negative;
    wire rested    = zero_ticks >= dwell_ticks && still;
    wire leaving   = duty == 0 && slewed != 0 && !same_sign;
    wire locked    = leaving && !rested;

    // CHAIN-4
    wire signed [14:0] next_duty = on && !locked ? slewed : 15'sd0;

    always @(posedge clk) begin
        if (rst) begin
            duty          <= 15'sd0;
            moved_yet     <= 1'b0;
            last_negative <= 1'b0;
            zero_ticks    <= 16'd0;
            held_ticks    <= 16'd0;
            at_ceiling    <= 1'b0;
            at_slew       <= 1'b0;
            dwell_lock    <= 1'b0;
            let_go_ticks  <= 16'd0;
        end else if (tick) begin
            duty         <= next_duty;
            zero_ticks   <= next_duty == 0 ? one_more(zero_ticks) : 16'd0;
            held_ticks   <= on && locked ? one_more(held_ticks) : 16'd0;
            at_ceiling   <= on && target != demand;
            at_slew      <= on && slewed != wanted;
            dwell_lock   <= on && locked;
            let_go_ticks <= on && leaving && !locked ? held_ticks : 16'd0;
            if (next_duty != 0) begin
                moved_yet     <= 1'b1;
                last_negative <= next_duty < 0;
            end
        end
    end

`ifdef FORMAL
    // The last tick's inputs and duty, and a record of its own of what S3 speaks of.
    reg               f_ticked = 1'b0;
    reg               f_on;
    reg               f_still;
    reg signed [14:0] f_before = 15'sd0;
    reg        [13:0] f_ceiling, f_up, f_down;
    reg        [15:0] f_dwell;
    reg               f_crossing; // the demand had the other sign
    reg        [15:0] f_zero = 16'd0;      // ticks at zero before the last tick, counted by the duty alone, held at 65535
    reg               f_never = 1'b1;      // had not left zero before the last tick
    reg               f_was_negative = 1'b0; // the sign it had when it last was away from zero
    reg               f_begun = 1'b0;
    reg        [1:0]  f_turned = 2'd0;     // signs seen, for the cover

    wire [15:0] f_zero_now = !f_ticked ? f_zero : duty != 0 ? 16'd0 : one_more(f_zero);

    initial assume (rst);

    always @(posedge clk) begin
        f_begun  <= 1'b1;
        f_ticked <= tick && !rst;
        if (rst) begin
            f_zero         <= 16'd0;
            f_never        <= 1'b1;
            f_was_negative <= 1'b0;
            f_turned       <= 2'd0;
        end else begin
            f_zero <= f_zero_now;
            if (duty != 0) begin
                f_never        <= 1'b0;
                f_was_negative <= duty < 0;
            end
        end
        if (!rst && tick) begin
            f_on      <= on;
            f_still   <= still;
            f_before  <= duty;
            f_ceiling <= ceiling;
            f_up      <= slew_up_duty;
            f_down    <= slew_down_duty;
            f_dwell   <= dwell_ticks;
            f_crossing <= crossing;
            f_turned  <= f_turned | {next_duty < 0, next_duty > 0};
        end

        if (f_begun) begin // what holds always, which the induction leans on
            bounded: assert (duty <= $signed({1'b0, MAX_DUTY}) && duty >= -$signed({1'b0, MAX_DUTY}));
            zero_counted: assert (zero_ticks == f_zero_now);
            move_known: assert (moved_yet == (!f_never || duty != 0));
            sign_kept: assert (!moved_yet || last_negative == (duty != 0 ? duty < 0 : f_was_negative));
        end
        if (f_begun && f_ticked) begin
            // S1
            S1: assert (duty <= $signed({1'b0, f_ceiling}) && duty >= -$signed({1'b0, f_ceiling}));
            // S2, the cut of a tightened ceiling and the switching off excepted
            if (f_on) begin
                S2_up: assert (size_of(duty) <= size_of(held_within(f_before, f_ceiling)) + {1'b0, f_up});
                S2_down: assert (size_of(duty) + {1'b0, f_down} >= size_of(held_within(f_before, f_ceiling)));
                if (f_crossing) CHAIN_2_to_zero: assert (size_of(duty) ==
                    (size_of(held_within(f_before, f_ceiling)) > f_down ? size_of(held_within(f_before, f_ceiling)) - f_down : 14'd0));
            end else off: assert (duty == 0);
            // S3: never through zero in one tick; and away from it with another sign only rested
            S3_zero_first: assert (!(f_before > 0 && duty < 0) && !(f_before < 0 && duty > 0));
            if (f_before == 0 && duty != 0 && (f_never || f_was_negative != (duty < 0)))
                S3_rested: assert (f_zero >= f_dwell && f_still);
        end
        if (f_begun) begin
            c_reversed: cover (f_turned == 2'b11 && duty < 0);
            c_locked: cover (f_ticked && dwell_lock);
            c_let_go: cover (f_ticked && let_go_ticks == 2);
            c_ceiling: cover (f_ticked && at_ceiling && duty == $signed({1'b0, f_ceiling}) && duty > 0);
        end
    end
`endif
endmodule

`default_nettype wire
