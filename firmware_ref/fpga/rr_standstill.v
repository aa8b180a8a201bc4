// Judges standstill by the counts: for the last `still_ticks` ticks they stayed within `still_counts` of a mark (SPEC.md, S3).
//
// Does: follow the counts with each `tick`, equal to rr_chain_watch of firmware_ref/core/chain.c.
// Does not: count (rr_quadrature.v).
// Latency: `still` already holds in the clock of `tick`, for the same tick's rr_chain.
// Properties, under FORMAL: `still` is never given within `still_ticks` ticks of a movement, by induction; covered.
`default_nettype none

module rr_standstill (
    input  wire               clk,
    input  wire               rst,

    input  wire               tick,
    input  wire        [31:0] counts,
    input  wire               has_encoder,  // low (`sense` 0): always still, the dwell alone decides
    input  wire        [14:0] still_counts,
    input  wire        [15:0] still_ticks,

    output wire               still
);
    reg [31:0] mark;
    reg [15:0] still_for; // ticks by the mark, held at 65535

    wire signed [31:0] away = counts - mark;
    wire stayed = away <= $signed({17'd0, still_counts}) && away >= -$signed({17'd0, still_counts});
    wire [15:0] next_for = !stayed ? 16'd0 : still_for == 16'hffff ? still_for : still_for + 16'd1;

    assign still = !has_encoder || next_for >= still_ticks;

    always @(posedge clk) begin
        if (rst) begin
            mark      <= 32'd0;
            still_for <= 16'd0;
        end else if (tick) begin
            mark      <= stayed ? mark : counts;
            still_for <= next_for;
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg        f_left = 1'b0;    // the counts have left a mark since the reset
    reg [16:0] f_since = 17'd0;  // ticks ended since the tick that last set the mark, held at 65535
    reg [31:0] f_mark = 32'd0;   // the counts in that tick

    wire [31:0] f_away = counts - f_mark; // its size, either way round
    wire        f_stayed = (f_away[31] ? -f_away : f_away) <= {17'd0, still_counts};

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        if (rst) begin
            f_left  <= 1'b0;
            f_since <= 17'd0;
            f_mark  <= 32'd0;
        end else if (tick) begin
            if (!f_stayed) begin
                f_left  <= 1'b1;
                f_since <= 17'd0;
                f_mark  <= counts;
            end else if (f_since != 17'd65535) f_since <= f_since + 17'd1;
        end
        if (f_begun) begin
            counted: assert ({1'b0, still_for} == f_since);
            marked: assert (mark == f_mark);
            if (!rst && tick && has_encoder && still && still_ticks != 0) begin
                S3_stayed: assert (f_stayed);
                S3_long_enough: assert (f_since + 17'd1 >= {1'b0, still_ticks});
            end
            c_still: cover (f_left && tick && still && has_encoder && still_ticks == 3);
        end
    end
`endif
endmodule

`default_nettype wire
