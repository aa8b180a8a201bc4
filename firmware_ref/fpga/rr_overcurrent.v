// Tells of a current beyond its limit for `trip_ticks` ticks in a row (SPEC.md, TRIP-3).
//
// Does: judge one reading with each `tick`, equal to judge_current of firmware_ref/core/guard.c.
// Does not: latch (rr_interlock.v).
// Latency: `found` holds from one clock after the tick, for that tick.
// Properties, under FORMAL: found with the n-th reading in a row and not before, by induction; covered.
`default_nettype none

module rr_overcurrent (
    input  wire               clk,
    input  wire               rst,

    input  wire               tick,
    input  wire signed [17:0] current_ma,
    input  wire        [16:0] trip_ma,    // at most 130000
    input  wire        [9:0]  trip_ticks, // 1 to 1000

    output reg                found,
    output wire               persists    // the present reading is beyond the limit: `clear` must be refused
);
    reg [15:0] over_ticks; // held at 65535

    assign persists = current_ma > $signed({1'b0, trip_ma}) || current_ma < -$signed({1'b0, trip_ma});

    wire [15:0] next_over = !persists ? 16'd0 : over_ticks == 16'hffff ? over_ticks : over_ticks + 16'd1;

    always @(posedge clk) begin
        if (rst) begin
            over_ticks <= 16'd0;
            found      <= 1'b0;
        end else if (tick) begin
            over_ticks <= next_over;
            found      <= persists && next_over >= {6'd0, trip_ticks};
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg        f_ticked = 1'b0;
    reg [16:0] f_row = 17'd0; // readings beyond the limit in a row
    reg [9:0]  f_enough = 10'd1;

    wire signed [18:0] f_size = current_ma < 0 ? -$signed({current_ma[17], current_ma}) : $signed({current_ma[17], current_ma});

    initial assume (rst);

    always @(posedge clk) begin
        f_begun  <= 1'b1;
        f_ticked <= tick && !rst;
        assume (trip_ticks >= 1 && trip_ticks <= 1000 && trip_ma <= 130000);
        if (rst) f_row <= 17'd0;
        else if (tick) begin
            f_row    <= !persists ? 17'd0 : f_row == 17'd65535 ? f_row : f_row + 17'd1;
            f_enough <= trip_ticks;
        end
        if (f_begun) begin
            counted: assert ({1'b0, over_ticks} == f_row);
            either_way: assert (persists == (f_size > $signed({2'b0, trip_ma})));
            if (f_ticked) TRIP_3: assert (found == (f_row != 0 && f_row >= {7'd0, f_enough}));
            c_third: cover (f_ticked && found && f_enough == 3);
        end
    end
`endif
endmodule

`default_nettype wire
