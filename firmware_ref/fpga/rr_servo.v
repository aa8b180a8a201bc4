// One servo's pulse in a tick: inside its limits, at its slew (SPEC.md S7 and the last paragraph on the chain in section 12).
//
// Does: one step with each `tick`, equal to rr_servo_step_ns and rr_servo_first_ns of firmware_ref/core/servo.c.
// Does not: move the goal (the order's own ramp is the processor's), nor make the pulse (rr_servo_pulse.v).
// Latency: the pulse is that of the tick from one clock after `tick` on.
// Properties, under FORMAL: S7 by induction, with the exceptions that SPEC.md names; covered.
`default_nettype none

module rr_servo (
    input  wire        clk,
    input  wire        rst,

    input  wire        tick,
    input  wire        on,          // low: no pulse from this tick on
    input  wire [21:0] goal_ns,     // 0 = no pulse

    input  wire [21:0] least_ns,    // above 0
    input  wire [21:0] greatest_ns, // not below least_ns
    input  wire [21:0] home_ns,
    input  wire [21:0] slew_ns,     // a tick, at least 1

    output reg  [21:0] pulse_ns,    // 0 = none
    output reg         at_slew
);
    // All that it depends on comes as an argument: a simulator watches nothing else.
    function [21:0] held(input [21:0] value, input [21:0] least, input [21:0] greatest);
        held = value < least ? least : value > greatest ? greatest : value;
    endfunction

    wire [21:0] goal  = held(goal_ns, least_ns, greatest_ns);
    wire [21:0] here  = held(pulse_ns, least_ns, greatest_ns);
    wire [21:0] home  = held(home_ns, least_ns, greatest_ns);
    wire [21:0] above = goal - here;
    wire [21:0] below = here - goal;
    wire [21:0] moved = goal > here
        ? (above > slew_ns ? here + slew_ns : goal)
        : (below > slew_ns ? here - slew_ns : goal);
    wire [21:0] next_ns = !on || goal_ns == 0 ? 22'd0 : pulse_ns == 0 ? home : moved;

    always @(posedge clk) begin
        if (rst) begin
            pulse_ns <= 22'd0;
            at_slew  <= 1'b0;
        end else if (tick) begin
            pulse_ns <= next_ns;
            at_slew  <= on && goal_ns != 0 && next_ns != goal;
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg        f_ticked = 1'b0;
    reg [21:0] f_before = 22'd0;
    reg [21:0] f_least, f_greatest, f_home, f_slew;
    reg        f_tightened; // the limits no longer held the pulse before
    reg [1:0]  f_ways = 2'd0;

    initial assume (rst);

    always @(posedge clk) begin
        f_begun  <= 1'b1;
        f_ticked <= tick && !rst;
        if (tick) begin
            assume (least_ns > 0 && least_ns <= greatest_ns && greatest_ns <= 22'd2600000);
            assume (slew_ns >= 1 && slew_ns <= 22'd2000000);
            f_before    <= pulse_ns;
            f_least     <= least_ns;
            f_greatest  <= greatest_ns;
            f_home      <= home;
            f_slew      <= slew_ns;
            f_tightened <= here != pulse_ns;
            if (!rst) f_ways <= f_ways | {next_ns < pulse_ns && next_ns != 0, next_ns > pulse_ns && pulse_ns != 0};
        end
        if (f_begun) bounded: assert (pulse_ns <= 22'd2600000);
        if (f_begun && f_ticked && pulse_ns != 0) begin
            S7_inside: assert (pulse_ns >= f_least && pulse_ns <= f_greatest);
            if (f_before == 0) S7_home: assert (pulse_ns == f_home);
            else if (!f_tightened) begin
                S7_up: assert ({1'b0, pulse_ns} <= {1'b0, f_before} + {1'b0, f_slew});
                S7_down: assert ({1'b0, pulse_ns} + {1'b0, f_slew} >= {1'b0, f_before});
            end
        end
        if (f_begun) c_both_ways: cover (f_ways == 2'b11 && pulse_ns != 0 && !at_slew);
    end
`endif
endmodule

`default_nettype wire
