// Makes a servo's pulses from their width in ns, one each FRAME_NS.
//
// Does: at the start of each frame take the width; hold the pin high for it, rounded up to CLOCK_NS; stay low where it is 0.
// Does not: cut a pulse that has begun: a shortened one would be a command to another place. Off is off at the pulse's end,
//   2.6 ms after at most.
// Latency: up to one frame for a new width.
// Properties, under FORMAL: one pulse a frame, of the width at its start; none for width 0; by induction; covered.
`default_nettype none

module rr_servo_pulse #(
    parameter CLOCK_NS = 20,
    parameter FRAME_NS = 20000000 // a multiple of CLOCK_NS, below 2^25 - CLOCK_NS
) (
    input  wire        clk,
    input  wire        rst,

    input  wire [21:0] pulse_ns, // less than FRAME_NS; 0 = none

    output reg         pin
);
    reg [24:0] elapsed_ns; // since the start of the frame
    reg [21:0] width_ns;   // of this frame

    wire        starts = elapsed_ns >= FRAME_NS - CLOCK_NS;

    always @(posedge clk) begin
        if (rst) begin
            elapsed_ns <= FRAME_NS - CLOCK_NS;
            width_ns   <= 22'd0;
            pin        <= 1'b0;
        end else begin
            elapsed_ns <= starts ? 25'd0 : elapsed_ns + CLOCK_NS;
            if (starts) width_ns <= pulse_ns;
            pin <= starts ? pulse_ns != 0 : elapsed_ns + CLOCK_NS < {3'd0, width_ns};
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg [24:0] f_high_ns = 25'd0; // how long the pin has been high in this frame
    reg        f_full = 1'b0;     // the last clock ended a frame that had begun after the reset
    reg        f_started = 1'b0;
    reg [21:0] f_width = 22'd0;
    reg [24:0] f_whole_ns = 25'd0;

    initial assume (rst);

    always @(posedge clk) begin
        f_begun <= 1'b1;
        assume ({3'd0, pulse_ns} < FRAME_NS - CLOCK_NS);
        if (rst) begin
            f_started <= 1'b0;
            f_full    <= 1'b0;
            f_high_ns <= 25'd0;
        end else begin
            f_started  <= f_started || starts;
            f_full     <= starts && f_started;
            f_width    <= width_ns;
            f_whole_ns <= f_high_ns + (pin ? CLOCK_NS : 0);
            f_high_ns  <= starts ? 25'd0 : f_high_ns + (pin ? CLOCK_NS : 0);
        end
        if (f_begun && f_started) begin
            in_frame: assert (elapsed_ns < FRAME_NS);
            pin_follows: assert (pin == (elapsed_ns < {3'd0, width_ns}));
            if (pin) high_so_far: assert (f_high_ns == elapsed_ns);
            else high_in_all: assert (f_high_ns >= {3'd0, width_ns} && f_high_ns < {3'd0, width_ns} + CLOCK_NS);
            width_bound: assert ({3'd0, width_ns} < FRAME_NS - CLOCK_NS);
        end else if (f_begun) none_before: assert (!pin);
        if (f_begun && f_full) begin
            one_pulse: assert (f_whole_ns >= {3'd0, f_width} && f_whole_ns < {3'd0, f_width} + CLOCK_NS);
            c_pulse: cover (f_whole_ns == 3 * CLOCK_NS);
        end
    end
`endif
endmodule

`default_nettype wire
