// The numbers, states and trips of the ramprig line protocol that gates speak of.
//
// Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
`ifndef RAMPRIG_WORDS_VH
`define RAMPRIG_WORDS_VH

`define RR_DUTY_FULL             14'd10000  // 1/10000: duty at full scale

`define RR_STATE_OFF             2'd0       // outputs off, nothing latched
`define RR_STATE_ARMED           2'd1       // orders are carried out under the lease
`define RR_STATE_STOPPING        2'd2       // a category 1 stop is running
`define RR_STATE_TRIPPED         2'd3       // outputs off, a trip is latched

`define RR_TRIP_NONE             4'd0       // no trip
`define RR_TRIP_SELF_TEST        4'd1       // the board found itself faulty
`define RR_TRIP_RESTARTED        4'd2       // the board restarted by brown-out or watchdog
`define RR_TRIP_LINE_BREAK       4'd3       // a BREAK came on the receive line
`define RR_TRIP_OVERCURRENT      4'd4       // more than trip_ma for trip_ticks ticks in a row
`define RR_TRIP_OVERVOLTAGE      4'd5       // supply above over_mv for supply_ticks ticks in a row
`define RR_TRIP_UNDERVOLTAGE     4'd6       // supply below under_mv for supply_ticks ticks in a row
`define RR_TRIP_WRONG_WAY        4'd7       // the encoder ran against the duty
`define RR_TRIP_OVERSPEED        4'd8       // more than speed_counts in one window
`define RR_TRIP_STALL            4'd9       // duty and no counts for stall_ticks
`define RR_TRIP_OVERLOAD         4'd10      // the thermal model reached its limit
`define RR_TRIP_LINK_LOST        4'd11      // no valid new line for the lease
`define RR_TRIP_LATE_ORDER       4'd12      // an order came after its start tick

`endif
