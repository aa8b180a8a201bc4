// Receives asynchronous serial bytes, 8N1, and tells a BREAK (SPEC.md section 4 and STOP-6).
//
// Does: take the line into the clock, look for a start bit that is still low in its middle, sample each bit in its middle. A low
//   stop bit is a framing error; with eight low bits before it, it is a BREAK, told once. After either, nothing is received
//   before the line has been high for one clock.
// Does not: keep more than one byte: `valid` is one clock long.
// Latency: `valid` in the middle of the stop bit, plus three clocks.
// Properties, under FORMAL: at most one verdict a frame; a BREAK is ten low samples, from the start bit to the stop bit; covered.
`default_nettype none

module rr_uart_rx #(
    parameter [15:0] BIT_CLOCKS = 16'd434 // clocks a bit, at least 4: clk / rate, to within 2 %
) (
    input  wire       clk,
    input  wire       rst,

    input  wire       line,     // with no relation to the clock; high at rest

    output reg        valid,
    output reg  [7:0] octet,
    output reg        framing,  // one clock long: the stop bit was low, the byte is lost
    output reg        is_break  // one clock long, together with `framing`
);
    localparam [1:0] IDLE = 2'd0, START = 2'd1, BITS = 2'd2, WAIT_HIGH = 2'd3;

    reg [1:0]  line_in;  // against metastability
    reg [1:0]  state;
    reg [15:0] clocks;   // left until the next sample
    reg [3:0]  bits;     // sampled: eight of data, then the stop bit
    reg [7:0]  shift;
    reg        any_high; // among this frame's data bits

    wire here  = line_in[1];
    wire due   = clocks == 16'd0;
    wire stops = state == BITS && due && bits == 4'd8;

    always @(posedge clk) begin
        line_in <= rst ? 2'b11 : {line_in[0], line};
        valid    <= !rst && stops && here;
        framing  <= !rst && stops && !here;
        is_break <= !rst && stops && !here && !any_high;
        if (stops && here) octet <= shift;
        if (rst) begin
            state  <= WAIT_HIGH;
            clocks <= 16'd0;
            bits   <= 4'd0;
        end else case (state)
            WAIT_HIGH: if (here) state <= IDLE;
            IDLE: if (!here) begin
                state  <= START;
                clocks <= (BIT_CLOCKS >> 1) - 16'd1;
            end
            START: begin
                clocks   <= due ? BIT_CLOCKS - 16'd1 : clocks - 16'd1;
                bits     <= 4'd0;
                any_high <= 1'b0;
                if (due) state <= here ? IDLE : BITS; // a shorter low is no start bit
            end
            default: begin
                clocks <= due ? BIT_CLOCKS - 16'd1 : clocks - 16'd1;
                if (due) begin
                    shift    <= {here, shift[7:1]};
                    any_high <= any_high || here;
                    bits     <= bits + 4'd1;
                    if (bits == 4'd8) state <= here ? IDLE : WAIT_HIGH;
                end
            end
        endcase
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg [3:0]  f_lows = 4'd0; // samples in a row that were low, from the start bit on

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        if (rst || (state == START && due)) f_lows <= !rst && !here ? 4'd1 : 4'd0;
        else if (state == BITS && due) f_lows <= here ? 4'd0 : f_lows + 4'd1;
        if (f_begun) begin
            bits_counted: assert (state != BITS || bits <= 4'd8);
            clocks_bound: assert (clocks < BIT_CLOCKS);
            one_verdict: assert (!(valid && framing) && (framing || !is_break));
            if (state == BITS) lows_counted: assert (f_lows <= bits + 4'd1 && (f_lows == bits + 4'd1) == !any_high);
            break_is_all_low: assert (is_break == (framing && f_lows == 4'd10));
            c_byte: cover (valid && octet == 8'h02);
            c_break: cover (is_break);
            c_framing: cover (framing && !is_break);
        end
    end
`endif
endmodule

`default_nettype wire
