// Test bench: sends the bytes of +in=FILE (decimal, one a line; 256 = a BREAK of two frames, 257 = a byte with a low stop bit) from
// rr_uart_tx over one wire to rr_uart_rx and rr_line, and prints each verdict. tests/test_fpga_line.py compares them.
`default_nettype none
`timescale 1ns / 1ns

module wire_bench;
    localparam [15:0] SENDER = 16'd50, RECEIVER = 16'd49; // clocks a bit: two per cent apart

    reg clk = 1'b0, rst = 1'b1, valid = 1'b0, pull_low = 1'b0;
    always #10 clk = !clk;

    integer    in, got, value;
    reg [1023:0] name;
    reg  [7:0] octet;
    wire       ready, line, heard, framing, is_break, good, bare_stop, bad;
    wire [7:0] heard_octet;

    rr_uart_tx #(.BIT_CLOCKS(SENDER)) sender (.clk(clk), .rst(rst), .valid(valid), .octet(octet), .ready(ready), .line(line));
    rr_uart_rx #(.BIT_CLOCKS(RECEIVER)) receiver (.clk(clk), .rst(rst), .line(line && !pull_low), .valid(heard),
        .octet(heard_octet), .framing(framing), .is_break(is_break));
    rr_line watcher (.clk(clk), .rst(rst), .take(heard), .octet(heard_octet), .spoilt(framing), .good(good),
        .bare_stop(bare_stop), .bad(bad));

    always @(posedge clk) begin
        if (good) $display("good");
        if (bare_stop) $display("stop");
        if (bad) $display("bad");
        if (is_break) $display("break");
        else if (framing) $display("framing");
    end

    initial begin
        if (!$value$plusargs("in=%s", name)) begin
            $display("no +in=FILE");
            $finish;
        end
        in = $fopen(name, "r");
        repeat (4) @(negedge clk);
        rst = 1'b0;
        repeat (4) @(negedge clk);
        got = $fscanf(in, "%d\n", value);
        while (got == 1) begin
            if (value == 256) begin
                pull_low = 1'b1;
                repeat (20 * SENDER) @(negedge clk);
                pull_low = 1'b0;
                repeat (2 * SENDER) @(negedge clk);
            end else begin
                octet = value == 257 ? 8'h55 : value[7:0];
                valid = 1'b1;
                @(negedge clk) valid = 1'b0;
                if (value == 257) begin
                    repeat (9 * SENDER) @(negedge clk);
                    pull_low = 1'b1;
                    repeat (SENDER) @(negedge clk);
                    pull_low = 1'b0;
                    repeat (SENDER) @(negedge clk);
                end
                while (!ready) @(negedge clk);
            end
            got = $fscanf(in, "%d\n", value);
        end
        repeat (4 * SENDER) @(negedge clk);
        $finish;
    end
endmodule

`default_nettype wire
