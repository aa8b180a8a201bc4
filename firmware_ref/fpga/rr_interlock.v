// One motor's last word in gates: whatever the processor writes, S1 to S5 of SPEC.md hold at the bridge.
//
// Does: hold `armed` between `arm` and the first of `disarm`, `stop_now`, lease and overcurrent; latch the trip with its number of
//   SPEC.md section 11 (the lowest wins) until `clear`; run chain, standstill and bridge under it. `stop_now` is for BREAK and a
//   hard-wired input, and latches `line_break`; `disarm` latches nothing, so the bare `stop` belongs to it (STOP-4). Both act
//   without waiting for a tick, and win over `arm`.
// Asks: `tick` from a counter in gates, never from the processor: no tick, no lease. All inputs in step with `clk`: an input pin
//   goes through two flip-flops first, or `armed` and `trip` may each see it differently. `rst` for a clock at least after power-up.
// Does not: ramp down. A lease that ends here switches off at once: give it the lease plus the stop's time plus one tick, so that
//   it acts only where the processor did not. No safety function: a gate array fails in ways that no proof here speaks of.
// Latency: bridge off one clock after `stop_now`, two after `disarm`; one tick for current, counts and lease.
// Properties, under FORMAL: S5, off whenever not armed, every finding trips, the current is judged, no duty from a tick that was not
//   armed, by induction; S1 to S4 in the modules it is made of; covered. How lease and standstill are wired is read, not proved.
`default_nettype none
`include "words.vh"

module rr_interlock #(
    parameter [13:0] MAX_DUTY = `RR_DUTY_FULL,
    parameter [13:0] STEP     = 14'd4,
    parameter [7:0]  DEAD     = 8'd50
) (
    input  wire               clk,
    input  wire               rst,
    input  wire               tick,

    // from the processor; each of the first five is one clock long
    input  wire               arm,
    input  wire               disarm,
    input  wire               clear,
    input  wire               renew,
    input  wire               stop_now,
    input  wire signed [14:0] demand,
    input  wire               brake,

    // limits, constant while armed but for tightening
    input  wire        [13:0] ceiling_duty,
    input  wire        [13:0] slew_up_duty,
    input  wire        [13:0] slew_down_duty,
    input  wire        [15:0] dwell_ticks,
    input  wire               has_encoder,
    input  wire        [14:0] still_counts,
    input  wire        [15:0] still_ticks,
    input  wire        [16:0] trip_ma,
    input  wire        [9:0]  trip_ticks,
    input  wire        [15:0] lease_ticks,

    // from the motor
    input  wire        [31:0] counts,
    input  wire signed [17:0] current_ma,

    // to the bridge
    output wire               enable,
    output wire               leg_a,
    output wire               leg_b,

    // to the processor
    output reg                armed,
    output reg         [3:0]  trip,       // number of the latched trip, RR_TRIP_NONE for none
    output wire signed [14:0] duty,
    output wire               at_ceiling,
    output wire               at_slew,
    output wire               dwell_lock,
    output wire        [15:0] let_go_ticks
);
    wire expired, over, over_persists, still;

    wire       tripped = trip != `RR_TRIP_NONE;
    wire [3:0] found   = stop_now ? `RR_TRIP_LINE_BREAK
                       : over     ? `RR_TRIP_OVERCURRENT
                       : expired  ? `RR_TRIP_LINK_LOST
                       :            `RR_TRIP_NONE;
    wire       may_arm   = !tripped && !stop_now && !over_persists && demand == 0 && duty == 0;
    wire       may_clear = !stop_now && !over_persists && demand == 0;

    always @(posedge clk) begin
        if (rst) begin
            armed <= 1'b0;
            trip  <= `RR_TRIP_NONE;
        end else begin
            armed <= armed ? !disarm && found == `RR_TRIP_NONE : arm && !disarm && may_arm;
            if (armed && found != `RR_TRIP_NONE) trip <= found;
            else if (clear && may_clear && !armed) trip <= `RR_TRIP_NONE;
        end
    end

    rr_lease lease (.clk(clk), .rst(rst), .tick(tick), .armed(armed), .renew(renew || (arm && !armed)),
        .lease_ticks(lease_ticks), .expired(expired));
    rr_overcurrent overcurrent (.clk(clk), .rst(rst), .tick(tick), .current_ma(current_ma), .trip_ma(trip_ma),
        .trip_ticks(trip_ticks), .found(over), .persists(over_persists));
    rr_standstill standstill (.clk(clk), .rst(rst), .tick(tick), .counts(counts), .has_encoder(has_encoder),
        .still_counts(still_counts), .still_ticks(still_ticks), .still(still));
    rr_chain #(.MAX_DUTY(MAX_DUTY)) chain (.clk(clk), .rst(rst), .tick(tick), .on(armed && found == `RR_TRIP_NONE),
        .demand(demand), .still(still), .ceiling_duty(ceiling_duty), .slew_up_duty(slew_up_duty),
        .slew_down_duty(slew_down_duty), .dwell_ticks(dwell_ticks), .duty(duty), .at_ceiling(at_ceiling),
        .at_slew(at_slew), .dwell_lock(dwell_lock), .let_go_ticks(let_go_ticks));
    // A duty that was cut off between two ticks stands in the chain until the next one; the bridge sees zero.
    rr_bridge #(.STEP(STEP), .DEAD(DEAD)) bridge (.clk(clk), .rst(rst), .on(armed && found == `RR_TRIP_NONE), .duty(duty),
        .brake(brake), .enable(enable), .leg_a(leg_a), .leg_b(leg_b));

`ifdef FORMAL
    reg       f_begun = 1'b0;
    reg       f_armed = 1'b0, f_tripped = 1'b0, f_arm = 1'b0, f_clear = 1'b0, f_stop = 1'b0, f_over = 1'b0;
    reg       f_zero = 1'b0, f_rest = 1'b0; // the demand was zero, the duty too
    reg [3:0] f_trip = 4'd0;
    reg [1:0] f_story = 2'd0; // tripped by current, cleared, armed again
    reg       f_disarm = 1'b0, f_found = 1'b0, f_current = 1'b0, f_ticked = 1'b0;

    wire signed [18:0] f_size = current_ma < 0 ? -$signed({current_ma[17], current_ma}) : $signed({current_ma[17], current_ma});

    initial assume (rst);

    always @(posedge clk) begin
        f_begun   <= 1'b1;
        f_armed   <= armed && !rst;
        f_tripped <= tripped && !rst;
        f_trip    <= rst ? `RR_TRIP_NONE : trip;
        f_arm     <= arm;
        f_clear   <= clear;
        f_stop    <= stop_now;
        f_over    <= over_persists;
        f_disarm  <= disarm;
        f_found   <= !rst && found != `RR_TRIP_NONE;
        f_current <= !rst && over;
        f_ticked  <= !rst && tick;
        f_zero    <= demand == 0;
        f_rest    <= duty == 0;
        f_story   <= rst ? 2'd0 : f_story == 0 && trip == `RR_TRIP_OVERCURRENT ? 2'd1
                   : f_story == 1 && !tripped ? 2'd2 : f_story == 2 && armed ? 2'd3 : f_story;
        if (f_begun) begin
            never_both: assert (!(armed && tripped));
            S5_off: assert (!tripped || !armed);
            S5_stays: assert (!f_tripped || tripped || (f_clear && !f_over && f_zero && !f_stop));
            S5_word_stays: assert (!f_tripped || !tripped || trip == f_trip);
            S5_arm: assert (f_armed || !armed || (f_arm && !f_tripped && !f_over && f_zero && f_rest && !f_stop));
            off_unless_armed: assert (f_armed || (!enable && !leg_a && !leg_b));
            stop_at_once: assert (!f_stop || (!armed && !enable && !leg_a && !leg_b));
            stop_latches: assert (!(f_stop && f_armed) || trip == `RR_TRIP_LINE_BREAK);
            disarm_wins: assert (!f_disarm || !armed);
            finding_trips: assert (!(f_found && f_armed) || (tripped && !armed));
            if (f_current && f_armed) current_trips: assert (trip == `RR_TRIP_OVERCURRENT || trip == `RR_TRIP_LINE_BREAK);
            current_judged: assert (over_persists == (f_size > $signed({2'b0, trip_ma})));
            if (f_ticked && duty != 0) duty_armed: assert (f_armed && !f_found);
            c_again: cover (f_story == 2'd3 && armed);
            c_lease: cover (trip == `RR_TRIP_LINK_LOST);
            c_break: cover (trip == `RR_TRIP_LINE_BREAK);
        end
    end
`endif
endmodule

`default_nettype wire
