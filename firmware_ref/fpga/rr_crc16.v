// The check of a line: CRC-16/IBM-3740, one byte a clock (SPEC.md section 4: polynomial 0x1021, start 0xffff, not reflected).
//
// Does: take `octet` in with `take`; `clear` begins a new body (and wins).
// Does not: know where a body ends (rr_line.v).
// Latency: one clock.
// Properties, under FORMAL: the byte step equals eight steps of the bit-wise division; covered by the catalogue's check value.
`default_nettype none

module rr_crc16 (
    input  wire        clk,

    input  wire        clear,
    input  wire        take,
    input  wire [7:0]  octet,

    output reg  [15:0] crc
);
    // x^16 + x^12 + x^5 + 1: the byte that leaves comes back at 0, 5 and 12, and its high nibble once more.
    function [15:0] after(input [15:0] before, input [7:0] value);
        reg [7:0] leaving;
        begin
            leaving = before[15:8] ^ value;
            leaving = leaving ^ {4'd0, leaving[7:4]};
            after = {before[7:0], 8'd0} ^ {leaving[3:0], 12'd0} ^ {3'd0, leaving, 5'd0} ^ {8'd0, leaving};
        end
    endfunction

    always @(posedge clk) begin
        if (clear) crc <= 16'hffff;
        else if (take) crc <= after(crc, octet);
    end

`ifdef FORMAL
    function [15:0] bit_by_bit(input [15:0] before, input [7:0] value);
        integer i;
        begin
            bit_by_bit = before;
            for (i = 7; i >= 0; i = i - 1)
                bit_by_bit = {bit_by_bit[14:0], 1'b0} ^ (bit_by_bit[15] ^ value[i] ? 16'h1021 : 16'h0000);
        end
    endfunction

    reg        f_took = 1'b0;
    reg [15:0] f_before;
    reg [7:0]  f_octet;

    always @(posedge clk) begin
        f_took   <= take && !clear;
        f_before <= crc;
        f_octet  <= octet;
        if (f_took) divided: assert (crc == bit_by_bit(f_before, f_octet));
        c_taken: cover (f_took && f_before == 16'hffff);
    end
`endif
endmodule

`default_nettype wire
