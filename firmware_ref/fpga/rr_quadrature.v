// Counts an incremental encoder's A and B, four counts a line (x4), 32 bits, wrapping (SPEC.md, channel `counts`).
//
// Does: take A and B into the clock with two flip-flops each, pass over pulses shorter than FILTER clocks, count each edge up
//   where (A, B) runs 00, 10, 11, 01 and down the other way; a step in which both change counts nothing and one more `illegal`.
// Does not: turn the sense round (swap A and B, or `sense` in the limits).
// Latency: an edge is counted FILTER + 3 clocks after it at the latest. A count is lost where an edge follows another within
//   FILTER + 1 clocks: at 50 MHz and FILTER 8 the greatest rate is above 5 million counts/s.
// Properties, under FORMAL: at most one count a clock and only for a legal step; a bounce inside FILTER never counts; covered.
`default_nettype none

module rr_quadrature #(
    parameter FILTER = 8 // clocks, 1 to 255
) (
    input  wire        clk,
    input  wire        rst,

    input  wire        a,       // from the encoder, with no relation to the clock
    input  wire        b,

    output reg  [31:0] counts,
    output reg  [15:0] illegal  // steps of both at once, held at 65535
);
    reg [1:0] a_in, b_in;    // against metastability
    reg [1:0] held;          // A and B as accepted
    reg [7:0] a_for, b_for;  // clocks for which the input has differed from what is accepted
    reg [1:0] before;        // the state counted last
    reg       known;         // `before` has been taken from the encoder

    wire [1:0] changed = before ^ held;
    wire       upwards = before[1] == held[0]; // for a legal step: the old A is the new B on the way 00, 10, 11, 01

    always @(posedge clk) begin
        a_in <= {a_in[0], a};
        b_in <= {b_in[0], b};
        if (rst) begin
            held  <= 2'b00;
            a_for <= 8'd0;
            b_for <= 8'd0;
        end else begin
            a_for <= a_in[1] == held[1] || a_for == FILTER - 1 ? 8'd0 : a_for + 8'd1;
            b_for <= b_in[1] == held[0] || b_for == FILTER - 1 ? 8'd0 : b_for + 8'd1;
            if (a_in[1] != held[1] && a_for == FILTER - 1) held[1] <= a_in[1];
            if (b_in[1] != held[0] && b_for == FILTER - 1) held[0] <= b_in[1];
        end
    end

    reg [8:0] settling; // after a reset the inputs are taken over before anything counts

    always @(posedge clk) begin
        if (rst) begin
            counts   <= 32'd0;
            illegal  <= 16'd0;
            before   <= 2'b00;
            known    <= 1'b0;
            settling <= 9'd0;
        end else if (!known) begin
            before   <= held;
            settling <= settling + 9'd1;
            known    <= settling == FILTER + 4;
        end else begin
            before <= held;
            if (changed == 2'b11) illegal <= illegal == 16'hffff ? illegal : illegal + 16'd1;
            else if (changed != 2'b00) counts <= upwards ? counts + 32'd1 : counts - 32'd1;
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg [31:0] f_counts;
    reg [1:0]  f_before;
    reg [15:0] f_illegal;
    reg        f_known, f_reset;
    reg [7:0]  f_a_differs = 8'd0, f_b_differs = 8'd0; // clocks in a row for which the synchronised input differed from the accepted
    reg [1:0]  f_held;

    initial assume (rst);

    always @(posedge clk) begin
        f_begun   <= 1'b1;
        f_counts  <= counts;
        f_illegal <= illegal;
        f_before  <= before;
        f_known   <= known;
        f_reset   <= rst;
        f_held    <= held;
        f_a_differs <= rst || a_in[1] == held[1] ? 8'd0 : f_a_differs == 8'hff ? 8'hff : f_a_differs + 8'd1;
        f_b_differs <= rst || b_in[1] == held[0] ? 8'd0 : f_b_differs == 8'hff ? 8'hff : f_b_differs + 8'd1;
        if (f_begun && !f_reset) begin
            one_at_most: assert (counts == f_counts || counts == f_counts + 32'd1 || counts == f_counts - 32'd1);
            if (counts != f_counts) begin // one of the two has changed, and they never count for both
                one_step: assert (f_known && (^(f_before ^ before)));
                not_both: assert (illegal == f_illegal);
            end
            case ({f_known, f_before, before}) // the whole table of legal steps
                5'b1_00_10, 5'b1_10_11, 5'b1_11_01, 5'b1_01_00: up: assert (counts == f_counts + 32'd1);
                5'b1_00_01, 5'b1_01_11, 5'b1_11_10, 5'b1_10_00: down: assert (counts == f_counts - 32'd1);
                default: else_none: assert (counts == f_counts);
            endcase
            a_counted: assert (a_for < FILTER && a_for <= f_a_differs);
            b_counted: assert (b_for < FILTER && b_for <= f_b_differs);
            if (held[1] != f_held[1]) a_bounce: assert (f_a_differs >= FILTER);
            if (held[0] != f_held[0]) b_bounce: assert (f_b_differs >= FILTER);
        end
        if (f_begun) begin
            c_up: cover (counts == 32'd4);
            c_down: cover (counts == -32'd2);
            c_illegal: cover (illegal == 16'd1);
        end
    end
`endif
endmodule

`default_nettype wire
