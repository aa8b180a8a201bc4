// The lease: tells when the host, or the processor between, has been silent too long (SPEC.md S4, LEASE-2).
//
// Does: count ticks without a `renew` while armed; `expired` once there were `lease_ticks`, as long as `armed` lasts.
// Does not: judge what renews; that is a valid new request (LEASE-1), which whoever checks lines tells.
// Latency: `expired` holds one clock after the tick that completes the lease.
// Properties, under FORMAL: expired at `lease_ticks` silent ticks and never before, by induction; covered.
`default_nettype none

module rr_lease (
    input  wire        clk,
    input  wire        rst,

    input  wire        tick,
    input  wire        armed,
    input  wire        renew,       // one clock long; one in the clock of `tick` counts for that tick
    input  wire [15:0] lease_ticks, // at least 1

    output reg         expired
);
    reg        renewed;      // since the last tick
    reg [15:0] silent_ticks; // held at 65535

    wire [15:0] next_silent = renewed || renew ? 16'd0 : silent_ticks == 16'hffff ? silent_ticks : silent_ticks + 16'd1;

    always @(posedge clk) begin
        if (rst) begin
            renewed      <= 1'b0;
            silent_ticks <= 16'd0;
            expired      <= 1'b0;
        end else begin
            renewed <= !tick && (renewed || renew);
            if (tick) silent_ticks <= next_silent;
            expired <= armed && (expired || (tick && next_silent >= lease_ticks));
        end
    end

`ifdef FORMAL
    reg        f_begun = 1'b0;
    reg [16:0] f_age = 17'd1; // ticks ended since the last renewal came (or since one before the reset), held at 65536
    reg        f_heard = 1'b0;    // one has come, for the cover
    reg        f_armed = 1'b0;
    reg        f_ticked = 1'b0;
    reg        f_expired = 1'b0;
    reg [15:0] f_lease = 16'd1;

    // The tick in which the renewal came is not silent; the last one completed the lease.
    wire f_due = f_ticked && f_age > {1'b0, f_lease};

    initial assume (rst);

    always @(posedge clk) begin
        f_begun   <= 1'b1;
        f_armed   <= armed && !rst;
        f_ticked  <= tick && !rst;
        f_expired <= expired && !rst;
        f_lease   <= lease_ticks;
        assume (lease_ticks >= 1);
        f_heard <= !rst && (f_heard || renew);
        if (rst) f_age <= 17'd1;
        else if (renew) f_age <= {16'd0, tick};
        else if (tick && f_age != 17'd65536) f_age <= f_age + 17'd1;
        if (f_begun) begin
            renewal_known: assert (f_age <= 17'd65536 && renewed == (f_age == 0));
            if (!renewed) silence_counted: assert ({1'b0, silent_ticks} + 17'd1 == f_age);
            if (!f_armed) not_unarmed: assert (!expired);
            else if (f_due) S4: assert (expired);
            else not_before: assert (expired == f_expired); // never before it is due, and once expired it stays
            c_expired: cover (expired && f_heard && f_age == 17'd4);
        end
    end
`endif
endmodule

`default_nettype wire
