// Sends asynchronous serial bytes, 8N1.
//
// Does: take `octet` in a clock with `valid` and `ready`, and send it, least bit first.
// Does not: queue: `ready` is low until the stop bit has been sent.
// Latency: the start bit begins one clock after the byte is taken.
// Properties, under FORMAL: the line is high whenever ready; ten bits a byte, each of BIT_CLOCKS; covered.
`default_nettype none

module rr_uart_tx #(
    parameter [15:0] BIT_CLOCKS = 16'd434 // clocks a bit, at least 2
) (
    input  wire       clk,
    input  wire       rst,

    input  wire       valid,
    input  wire [7:0] octet,
    output wire       ready,

    output reg        line
);
    reg [8:0]  shift;  // what is left, the stop bit highest
    reg [3:0]  bits;   // left, the one on the line included
    reg [15:0] clocks; // left of the bit on the line

    assign ready = bits == 4'd0;

    always @(posedge clk) begin
        if (rst) begin
            line   <= 1'b1;
            bits   <= 4'd0;
            clocks <= 16'd0;
        end else if (ready) begin
            if (valid) begin
                line   <= 1'b0;
                shift  <= {1'b1, octet};
                bits   <= 4'd10;
                clocks <= BIT_CLOCKS - 16'd1;
            end
        end else if (clocks != 16'd0) clocks <= clocks - 16'd1;
        else begin
            bits   <= bits - 4'd1;
            clocks <= bits == 4'd1 ? 16'd0 : BIT_CLOCKS - 16'd1;
            line   <= bits == 4'd1 ? 1'b1 : shift[0];
            shift  <= {1'b1, shift[8:1]};
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg [7:0]  f_octet = 8'd0;
    reg [19:0] f_time = 20'd0; // clocks since the byte was taken
    wire [9:0] f_frame = {1'b1, f_octet, 1'b0};

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        if (ready && valid) f_octet <= octet;
        f_time <= rst || ready ? 20'd0 : f_time + 20'd1;
        if (f_begun) begin
            at_rest: assert (!ready || (line && clocks == 16'd0));
            bound: assert (bits <= 4'd10 && clocks < BIT_CLOCKS);
            if (!ready) begin
                timed: assert (f_time == (4'd10 - bits) * BIT_CLOCKS + (BIT_CLOCKS - 16'd1 - clocks));
                on_the_line: assert (line == f_frame[4'd10 - bits]);
                to_come: assert (shift == (({10'h3ff, f_octet, 1'b0} >> (4'd11 - bits)) & 19'h1ff));
            end
            c_last: cover (bits == 4'd1 && f_octet == 8'h6b && clocks == 16'd0);
        end
    end
`endif
endmodule

`default_nettype wire
