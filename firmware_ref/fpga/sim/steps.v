// Test bench: takes one line of inputs a tick from +in=FILE, through standstill, overcurrent, chain and servo, and prints what each
// gives in that tick. sim/steps.c does the same with the core in C; tests/test_fpga_agreement.py compares them.
`default_nettype none
`timescale 1ns / 1ns

module steps;
    reg clk = 1'b0, rst = 1'b1, tick = 1'b0;
    always #10 clk = !clk;

    integer on, demand, counts, current_ma, goal_ns;
    integer ceiling, up, down, dwell, encoder, still_counts, still_ticks, trip_ma, trip_ticks, least, greatest, home, slew;
    integer in, got;
    reg [1023:0] name;

    wire               still, found, persists, at_ceiling, at_slew, dwell_lock, servo_at_slew;
    wire signed [14:0] duty;
    wire        [15:0] let_go;
    wire        [21:0] pulse_ns;

    rr_standstill standstill (.clk(clk), .rst(rst), .tick(tick), .counts(counts), .has_encoder(encoder != 0),
        .still_counts(still_counts[14:0]), .still_ticks(still_ticks[15:0]), .still(still));
    rr_overcurrent overcurrent (.clk(clk), .rst(rst), .tick(tick), .current_ma(current_ma[17:0]), .trip_ma(trip_ma[16:0]),
        .trip_ticks(trip_ticks[9:0]), .found(found), .persists(persists));
    rr_chain chain (.clk(clk), .rst(rst), .tick(tick), .on(on != 0), .demand(demand[14:0]), .still(still),
        .ceiling_duty(ceiling[13:0]), .slew_up_duty(up[13:0]), .slew_down_duty(down[13:0]), .dwell_ticks(dwell[15:0]),
        .duty(duty), .at_ceiling(at_ceiling), .at_slew(at_slew), .dwell_lock(dwell_lock), .let_go_ticks(let_go));
    rr_servo servo (.clk(clk), .rst(rst), .tick(tick), .on(on != 0), .goal_ns(goal_ns[21:0]), .least_ns(least[21:0]),
        .greatest_ns(greatest[21:0]), .home_ns(home[21:0]), .slew_ns(slew[21:0]), .pulse_ns(pulse_ns), .at_slew(servo_at_slew));

    initial begin
        if (!$value$plusargs("in=%s", name)) begin
            $display("no +in=FILE");
            $finish;
        end
        in = $fopen(name, "r");
        @(negedge clk);
        @(negedge clk) rst = 1'b0;
        got = 18;
        while (got == 18) begin
            got = $fscanf(in, "%d %d %d %d %d %d %d %d %d %d %d %d %d %d %d %d %d %d\n", on, demand, counts, current_ma, goal_ns,
                ceiling, up, down, dwell, encoder, still_counts, still_ticks, trip_ma, trip_ticks, least, greatest, home, slew);
            if (got == 18) begin
                tick = 1'b1;
                @(negedge clk) tick = 1'b0;
                @(negedge clk);
                $display("%0d %0d %0d %0d %0d %0d %0d %0d", duty, at_ceiling, at_slew, dwell_lock, let_go, found, persists, pulse_ns);
            end
        end
        $finish;
    end
endmodule

`default_nettype wire
