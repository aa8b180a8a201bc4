// Drives an H-bridge with two leg inputs and an enable from a signed duty (SPEC.md, CHAIN-4 and ORDER-6).
//
// Does: sign and magnitude: for a positive duty leg A is pulsed and leg B low, for a negative one the reverse; at zero the bridge
//   is disabled (coast), or enabled with both legs low (brake). The carrier runs through 10000 in strides of STEP, so it takes
//   no multiplication: its frequency is clk * STEP / 10000 (50 MHz and STEP 4: 20 kHz) and the duty is met to STEP / 10000.
//   A new duty is taken at the start of a period; `on` low ends everything at the next clock.
// Does not: make the dead time between the two switches of one leg, which belongs to the gate driver; keep the dwell (rr_chain.v).
//   Between a pulse on one leg and one on the other it keeps DEAD clocks of its own, whatever the duty does.
// Latency: one clock for off; up to one period for a new duty.
// Properties, under FORMAL: off is off, never both legs, DEAD kept, no pulse but of the duty's sign and in its share of an even
//   carrier, a new duty at the start of a period only, by induction; covered.
`default_nettype none

module rr_bridge #(
    parameter [13:0] STEP = 14'd4,
    parameter [7:0]  DEAD = 8'd50 // clocks, 1 to 255
) (
    input  wire               clk,
    input  wire               rst,

    input  wire               on,
    input  wire signed [14:0] duty,    // -10000 to 10000
    input  wire               brake,   // how to rest at zero

    output reg                enable,
    output reg                leg_a,
    output reg                leg_b
);
    localparam [14:0] FULL = 15'd10000;

    reg        [13:0] phase;
    reg signed [14:0] held;     // the duty of this period
    reg        [7:0]  a_ago;    // clocks since leg A was high, held at DEAD
    reg        [7:0]  b_ago;

    wire [14:0] next_phase = {1'b0, phase} + {1'b0, STEP};
    wire        wraps      = next_phase >= FULL;
    wire [14:0] wrapped    = next_phase - FULL;

    wire signed [14:0] here = $signed({1'b0, phase});
    wire pulse_a = held > 0 && here < held && b_ago == DEAD && !leg_b;
    wire pulse_b = held < 0 && here < -held && a_ago == DEAD && !leg_a;

    always @(posedge clk) begin
        if (rst || !on) begin
            phase  <= 14'd0;
            held   <= 15'sd0;
            enable <= 1'b0;
            leg_a  <= 1'b0;
            leg_b  <= 1'b0;
        end else begin
            phase  <= wraps ? wrapped[13:0] : next_phase[13:0];
            held   <= wraps ? duty : held;
            enable <= held != 0 || brake;
            leg_a  <= pulse_a;
            leg_b  <= pulse_b;
        end
        if (rst) begin
            a_ago <= 8'd0;
            b_ago <= 8'd0;
        end else begin
            a_ago <= leg_a ? 8'd0 : a_ago == DEAD ? DEAD : a_ago + 8'd1;
            b_ago <= leg_b ? 8'd0 : b_ago == DEAD ? DEAD : b_ago + 8'd1;
        end
    end

`ifdef FORMAL
    reg               f_begun = 1'b0;
    reg               f_on;
    reg signed [14:0] f_held, f_duty;
    reg        [13:0] f_phase;
    reg        [8:0]  f_a_low, f_b_low; // clocks for which each leg has been low, held at 256
    reg        [1:0]  f_seen = 2'd0;

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        f_on    <= on && !rst;
        f_held  <= held;
        f_duty  <= duty;
        f_phase <= phase;
        f_a_low <= rst || leg_a ? 9'd0 : f_a_low == 9'd256 ? f_a_low : f_a_low + 9'd1;
        f_b_low <= rst || leg_b ? 9'd0 : f_b_low == 9'd256 ? f_b_low : f_b_low + 9'd1;
        f_seen  <= rst ? 2'd0 : f_seen | {leg_b, leg_a};
        assume (duty >= -15'sd10000 && duty <= 15'sd10000);
        if (f_begun) begin
            phase_bound: assert ({1'b0, phase} < FULL);
            held_bound: assert (held >= -15'sd10000 && held <= 15'sd10000);
            shadow_bound: assert (f_a_low <= 9'd256 && f_b_low <= 9'd256);
            a_counted: assert (a_ago == (f_a_low < {1'b0, DEAD} ? f_a_low[7:0] : DEAD));
            b_counted: assert (b_ago == (f_b_low < {1'b0, DEAD} ? f_b_low[7:0] : DEAD));
            never_both: assert (!(leg_a && leg_b));
            if (!f_on) off: assert (!enable && !leg_a && !leg_b);
            if (leg_a) a_for_positive: assert (enable && f_held > 0 && f_b_low >= {1'b0, DEAD});
            if (leg_b) b_for_negative: assert (enable && f_held < 0 && f_a_low >= {1'b0, DEAD});
            if (leg_a) S1_a: assert ($signed({1'b0, f_phase}) < f_held);
            if (leg_b) S1_b: assert ($signed({1'b0, f_phase}) < -f_held);
            if (f_on && {1'b0, f_phase} + {1'b0, STEP} < FULL) begin
                carrier_runs: assert ({1'b0, phase} == {1'b0, f_phase} + {1'b0, STEP} && held == f_held);
            end else if (f_on) carrier_wraps: assert ({1'b0, phase} + FULL == {1'b0, f_phase} + {1'b0, STEP} && held == f_duty);
            c_reversed: cover (f_seen == 2'b11 && leg_a);
            c_braked: cover (f_on && enable && held == 0);
        end
    end
`endif
endmodule

`default_nettype wire
