// Watches the bytes of a line protocol's receive line: where a line ends, whether its check is right, whether it is a bare `stop`
// (SPEC.md sections 4 and 5).
//
// Does: with each LF, tell `good` (printable, at most 80 bytes, a body and its right check), `bare_stop` (the line `stop`), or
//   `bad`; nothing for an empty line and the bare `who`, which is for the processor. A CR right before LF is dropped. A byte with
//   a framing error spoils its line, and so does a BREAK.
// Does not: keep the bytes, read words or tags, or know a repeat; so `good` is not yet a reason to renew the lease (LEASE-1).
// Latency: one clock after the LF.
// Properties, under FORMAL: at most one verdict, and only for an LF; no good line longer than 80 or shorter than 7 bytes; covered.
`default_nettype none

module rr_line (
    input  wire       clk,
    input  wire       rst,

    input  wire       take,    // one byte
    input  wire [7:0] octet,
    input  wire       spoilt,  // framing error or BREAK, with or without `take`

    output reg        good,
    output reg        bare_stop,
    output reg        bad
);
    localparam [7:0] LF = 8'h0a, CR = 8'h0d, SPACE = 8'h20;
    localparam [6:0] LONGEST = 7'd80; // with its LF

    reg [39:0] last;     // the five bytes before, newest lowest: where the line ends, they are its check
    reg [6:0]  length;   // bytes of the line, without LF and dropped CR, held at 127
    reg        dirty;    // a byte that no line has
    reg        held_cr;  // a CR waits: only an LF may follow

    wire ends      = take && octet == LF;
    wire printable = octet >= SPACE && octet <= 8'h7e;
    wire keeps     = take && !ends && octet != CR;
    wire full      = keeps && length >= 7'd5; // `last` is full: its oldest byte belongs to the body

    wire [15:0] crc;
    rr_crc16 check (.clk(clk), .clear(rst || ends), .take(full), .octet(last[39:32]), .crc(crc));

    function is_hex(input [7:0] value);
        is_hex = (value >= "0" && value <= "9") || (value >= "a" && value <= "f");
    endfunction

    function [3:0] hex(input [7:0] value);
        hex = value <= "9" ? value[3:0] : value[3:0] + 4'd9;
    endfunction

    wire digits  = is_hex(last[31:24]) && is_hex(last[23:16]) && is_hex(last[15:8]) && is_hex(last[7:0]);
    wire [15:0] said = {hex(last[31:24]), hex(last[23:16]), hex(last[15:8]), hex(last[7:0])};
    wire fits    = {1'b0, length} + {7'd0, held_cr} < {1'b0, LONGEST};
    wire clean   = !dirty && !spoilt && fits;
    wire checked = length >= 7'd6 && last[39:32] == SPACE && digits && said == crc;
    wire bare    = length == 7'd4 && last[31:0] == "stop";
    wire passed  = length == 7'd0 || (length == 7'd3 && last[23:0] == "who");

    always @(posedge clk) begin
        good      <= !rst && ends && clean && checked;
        bare_stop <= !rst && ends && clean && bare;
        bad       <= !rst && ends && !(clean && (checked || bare || passed));
        if (rst || ends) begin
            length  <= 7'd0;
            dirty   <= 1'b0;
            held_cr <= 1'b0;
        end else begin
            if (take && octet == CR) held_cr <= 1'b1;
            if (keeps) length <= length == 7'd127 ? length : length + 7'd1;
            dirty <= dirty || spoilt || (take && held_cr) || (keeps && !printable);
        end
        if (rst || ends) last <= 40'd0;
        else if (keeps) last <= {last[31:0], octet};
    end

`ifdef FORMAL
    reg       f_begun = 1'b0;
    reg       f_ended = 1'b0;
    reg [8:0] f_bytes = 9'd0; // bytes of the line so far, LF and CR too, held at 511
    reg [8:0] f_whole = 9'd0;

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        f_ended <= ends && !rst;
        f_whole <= f_bytes + 9'd1;
        f_bytes <= rst || ends ? 9'd0 : take && f_bytes != 9'd510 ? f_bytes + 9'd1 : f_bytes;
        if (f_begun) begin
            counted: assert (f_bytes <= 9'd510 && (dirty || f_bytes == {2'd0, length} + {8'd0, held_cr} || length == 7'd127));
            one_verdict: assert ({1'b0, good} + {1'b0, bare_stop} + {1'b0, bad} <= 2'd1);
            only_at_its_end: assert (f_ended || !(good || bare_stop || bad));
            no_longer: assert (!(good || bare_stop) || f_whole <= 9'd80);
            no_shorter: assert (!good || f_whole >= 9'd7);
            c_good: cover (good && f_whole == 9'd8);
            c_stop: cover (bare_stop && f_whole == 9'd6);
            c_bad: cover (bad && f_whole == 9'd3);
        end
    end
`endif
endmodule

`default_nettype wire
