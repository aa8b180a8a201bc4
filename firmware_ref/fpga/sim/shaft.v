// Test bench: plays the levels of A and B from +in=FILE (clocks to wait, A, B) to rr_quadrature with a filter of four clocks, and
// prints counts and illegal steps after each line and at the end. tests/test_fpga_agreement.py compares them.
`default_nettype none
`timescale 1ns / 1ns

module shaft;
    reg clk = 1'b0, rst = 1'b1, a = 1'b0, b = 1'b0;
    always #10 clk = !clk;

    integer in, got, clocks, next_a, next_b;
    reg [1023:0] name;
    wire [31:0] counts;
    wire [15:0] illegal;

    rr_quadrature #(.FILTER(4)) decoder (.clk(clk), .rst(rst), .a(a), .b(b), .counts(counts), .illegal(illegal));

    initial begin
        if (!$value$plusargs("in=%s", name)) begin
            $display("no +in=FILE");
            $finish;
        end
        in = $fopen(name, "r");
        repeat (2) @(negedge clk);
        rst = 1'b0;
        repeat (40) @(negedge clk);
        got = $fscanf(in, "%d %d %d\n", clocks, next_a, next_b);
        while (got == 3) begin
            a = next_a[0];
            b = next_b[0];
            repeat (clocks) @(negedge clk);
            $display("%0d %0d", $signed(counts), illegal);
            got = $fscanf(in, "%d %d %d\n", clocks, next_a, next_b);
        end
        $finish;
    end
endmodule

`default_nettype wire
