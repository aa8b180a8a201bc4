"""Each word's answers and refusals, the lease, stops, limits, sampling and trail, over scripted inputs."""

from __future__ import annotations

import pytest

from mock_host import QUICK, Bench
from ramprig.mock import Board, Controller, LimitStore
from ramprig.mock.limits import is_looser
from ramprig_link.check import seal
from ramprig_link.samples import decode, decode_data
from ramprig_link.words import LIMITS, STATE_BITS, Cap, Tighter

WHO = "1 mock-1 ramprig-mock MOCK-0001 1 1000 1 1 10000 32 256 32 63"


def test_who_and_bare_who_tell_the_same() -> None:
    # SPEC WHO-1, WHO-2, VER-1
    bench = Bench()
    assert " ".join(bench.ok("who")) == WHO
    bench.controller.receive(b"who\n")
    bench.run(1)
    assert " ".join(bench.told("who")[0].fields) == WHO


def test_a_bare_who_renews_nothing() -> None:
    # SPEC WHO-2, LEASE-2
    bench = Bench().arm(100)
    armed = bench.tick
    for _ in range(20):
        bench.controller.receive(b"who\r\n")
        bench.run(5)
    bench.run(10)
    assert [(notice.tick, notice.fields) for notice in bench.told("trip")] == [
        (armed + 100, ("link_lost", "0", "100", "100"))
    ]


@pytest.mark.parametrize("body", ["beat", "state", "ramp 9 0 0 0", "nonsense", "arm 60 00000000", "limit trip_ma 0 x"])
def test_every_new_request_renews_the_lease_whatever_its_answer(body: str) -> None:
    # SPEC LEASE-1, BEAT-1
    bench = Bench().arm(100)
    bench.run(90)
    bench.ask(body)
    bench.run(99)
    assert bench.state == "armed"
    bench.run(1)
    assert bench.state != "armed"


def test_a_repeat_renews_nothing_and_the_lease_runs_out() -> None:
    # SPEC LEASE-1, LEASE-2, TAG-3
    bench = Bench().arm(100)
    armed = bench.tick
    line = seal(b"77 beat")
    bench.controller.receive(line)
    bench.run(1)
    for _ in range(12):
        bench.controller.receive(line)
        bench.run(10)
    assert bench.told("trip")[0].tick == armed + 1 + 100


def test_the_lease_counts_in_ticks_rounded_up() -> None:
    # SPEC LEASE-2, S4
    board = Board(tick_us=999)
    bench = Bench(board=board)
    bench.arm(100)
    armed = bench.tick
    bench.run(120)
    assert bench.told("trip")[0].tick == armed + 101


def test_state_tells_what_the_last_ended_tick_left() -> None:
    # SPEC STATE-1
    bench = Bench(board=Board(axes=2, servos=1))
    bench.inputs.set(counts=[5, -7], current_ma=[120, -30], supply_mv=11900, temperature_dc=301)
    bench.run(1)
    bench.inputs.set(counts=[6, -8])
    assert " ".join(bench.ok("state")) == "off none 0 11900 301 0 5 120 0 -7 -30 0"


def test_arm_asks_for_a_lease_in_range_a_digest_that_fits_and_the_state_off() -> None:
    # SPEC ARM-1, ARM-2, S6
    bench = Bench()
    digest = bench.store.digest()
    assert bench.refusal(f"arm 49 {digest}") == "range"
    assert bench.refusal(f"arm 201 {digest}") == "range"
    assert bench.refusal("arm 200 0123456") == "args"
    assert bench.refusal("arm 200 01234567") == "digest"
    assert bench.ok(f"arm 200 {digest}") == ("200",)
    assert bench.refusal(f"arm 200 {digest}") == "state"
    assert bench.state == "armed"


def test_disarm_waits_for_zero() -> None:
    # SPEC DISARM-1
    bench = Bench()
    assert bench.ok("disarm") == ()
    bench.run(30)
    bench.arm()
    bench.ramp(500)
    bench.run(20)
    assert bench.refusal("disarm") == "moving"
    bench.ramp(0)
    bench.run(20)
    told = len(bench.notices)
    assert bench.ok("disarm") == ()
    assert bench.words_since(told) == ["stop 0 disarm", "off off"]
    assert bench.lines[-3].split()[1] == "ok", "the answer goes before the notices"


def test_disarm_counts_a_demand_that_the_lock_holds_back() -> None:
    bench = Bench({("dwell_ticks", 0): 500})
    bench.arm()
    bench.ramp(500)
    bench.run(10)
    assert bench.duty == 0
    assert bench.refusal("disarm") == "moving"


def test_stop_0_is_off_in_the_same_tick() -> None:
    # SPEC STOP-1, STOP-3
    bench = Bench()
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.ok(f"swing 0 1500 0 {bench.tick + 2}")
    bench.run(30)
    told = len(bench.notices)
    assert bench.ok("stop 0") == ("off",)
    assert (bench.duty, bench.controller.pulses[0].pulse_ns) == (0, 0)
    assert bench.words_since(told) == ["stop 0 host", "off off"]
    assert bench.ok("stop 0") == ("off",)
    assert len(bench.notices) == told + 2
    assert bench.refusal("stop 2") == "range"


def test_stop_1_falls_by_the_slew_with_the_servos_held() -> None:
    # SPEC STOP-2, STOP-5
    bench = Bench()
    bench.run(30)
    bench.arm()
    bench.ramp(900)
    bench.ok(f"swing 0 1500 0 {bench.tick + 2}")
    bench.run(30)
    told = len(bench.notices)
    assert bench.ok("stop 1") == ("stopping",)
    assert bench.duty == 700
    assert bench.ok("stop 1") == ("stopping",)
    assert bench.controller.pulses[0].pulse_ns == 1_500_000
    assert (bench.run(2).duty, bench.state, bench.run(1).duty, bench.state) == (100, "stopping", 0, "off")
    assert bench.words_since(told) == ["stop 1 host", "off off"]
    assert bench.controller.pulses[0].pulse_ns == 0


def test_stop_1_ends_after_stop_ticks_at_the_latest() -> None:
    # SPEC STOP-5
    bench = Bench({("slew_down_duty", 0): 1, ("stop_ticks", 0): 25})
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.run(30)
    begin = bench.ask("stop 1").tick
    bench.run(24)
    assert (bench.state, bench.duty) == ("stopping", 2975)
    bench.run(1)
    assert (bench.state, bench.duty, bench.told("off")[-1].tick) == ("off", 0, begin + 25)


def test_stop_0_cuts_a_stop_1_short() -> None:
    bench = Bench({("slew_down_duty", 0): 1})
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.run(30)
    bench.ok("stop 1")
    assert bench.ok("stop 0") == ("off",)
    assert bench.duty == 0


def test_a_bare_stop_needs_no_check_and_is_told_by_notices() -> None:
    # SPEC STOP-4, LINE-7
    bench = Bench()
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.run(30)
    told = len(bench.notices)
    bench.controller.receive(b"stop\n")
    bench.run(1)
    bench.controller.receive(b"stop\n")
    bench.run(1)
    assert bench.words_since(told) == ["stop 0 bare", "off off", "off off"]


def test_an_urgent_stop_acts_each_time_and_touches_nothing_kept() -> None:
    # SPEC TAG-5
    bench = Bench().arm()
    bench.controller.receive(seal(b"42 beat"))
    bench.run(1)
    kept = bench.lines[-1]
    bench.controller.receive(seal(b"ff stop 0") + seal(b"ff stop 0") + seal(b"42 beat"))
    told = len(bench.lines)
    bench.run(1)
    assert [line.split()[:2] for line in bench.lines[told : told + 2]] == [["ff", "ok"], ["ff", "ok"]]
    assert bench.lines[told + 2] == kept


@pytest.mark.parametrize("state", ["off", "armed", "stopping", "tripped"])
def test_a_break_trips_where_outputs_can_act(state: str) -> None:
    # SPEC STOP-6, S5
    bench = Bench({("slew_down_duty", 0): 1, ("stop_ticks", 0): 500})
    bench.run(30)
    if state != "off":
        bench.arm()
        bench.ramp(3000)
        bench.run(30)
    if state == "stopping":
        bench.ok("stop 1")
    if state == "tripped":
        bench.refusal(f"ramp 0 0 0 {bench.tick}")
        bench.run(600)
    told = len(bench.notices)
    bench.controller.line_break()
    bench.run(1)
    live = state in ("armed", "stopping")
    assert bench.words_since(told) == (["trip line_break 0 0 0", "off tripped"] if live else [])
    assert bench.duty == 0


def test_nothing_moves_in_state_tripped_so_clear_need_not_ask() -> None:
    # SPEC CLEAR-2, ORDER-8
    bench = Bench()
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.ramp(2000, ahead=30)
    bench.controller.line_break()
    bench.run(1)
    assert bench.state == "tripped"
    assert not bench.controller.drives[0].moving
    assert len(bench.controller.orders) == 0
    assert bench.refusal(f"ramp 0 100 0 {bench.tick + 50}") == "state"
    assert bench.ok("clear") == ()


# ---- limits --------------------------------------------------------------------------------------------------------


def test_a_limit_is_read_and_set_by_name() -> None:
    # SPEC LIMIT-1, LIMIT-2
    bench = Bench()
    assert bench.ok("limit ceiling_duty 0") == ("6000",)
    assert bench.ok("limit ceiling_duty 0 7000") == ("7000",)
    assert bench.ok("limit ceiling_duty 0") == ("7000",)
    for body, reason in (
        ("limit ceiling_duty 1", "index"), ("limit lease_ms 1", "index"), ("limit nothing 0", "args"),
        ("limit lease_ms 0 49", "range"), ("limit lease_ms 0 5001", "range"), ("limit pulse_min_us 0 1901", "range"),
        ("limit pulse_max_us 0 1099", "range"), ("limit pulse_min_us 0 -1", "range"),
    ):  # fmt: skip
        assert bench.refusal(body) == reason, body


def test_the_boards_own_duty_bounds_every_ceiling() -> None:
    # SPEC LIMIT-2, S1
    bench = Bench({("ceiling_duty", 0): 4000}, board=Board(max_duty=5000))
    assert bench.refusal("limit ceiling_duty 0 5001") == "range"
    assert bench.ok("limit ceiling_duty 0 5000") == ("5000",)


def test_a_limit_is_in_force_from_the_next_tick() -> None:
    # SPEC LIMIT-4
    bench = Bench()
    bench.run(30)
    bench.arm()
    bench.ramp(3000)
    bench.run(30)
    assert bench.duty == 3000
    assert bench.ok("limit ceiling_duty 0 1000") == ("1000",)
    assert bench.duty == 3000
    assert bench.run(1).duty == 1000


@pytest.mark.parametrize("name", list(LIMITS))
def test_no_limit_is_loosened_while_armed(name: str) -> None:
    # SPEC LIMIT-3, S6
    limit = LIMITS[name]
    bench = Bench(dict.fromkeys([(name, 0)], middle := (limit.lowest + limit.highest) // 2)).arm(50)
    if name in ("lease_ms", "pulse_min_us", "pulse_max_us"):
        middle = bench.store[name, 0]
    looser = {Tighter.LOWER: [middle + 1], Tighter.HIGHER: [middle - 1], Tighter.NONE: [middle + 1, middle - 1]}
    for value in looser[limit.tighter]:
        assert bench.refusal(f"limit {name} 0 {value}") in ("armed", "range")
        assert bench.ok(f"limit {name} 0") == (str(middle),)
    assert bench.ok(f"limit {name} 0 {middle}") == (str(middle),)
    if limit.tighter is not Tighter.NONE:
        tighter = middle + (1 if limit.tighter is Tighter.HIGHER else -1)
        assert bench.ok(f"limit {name} 0 {tighter}") == (str(tighter),)


def test_zero_is_looser_than_every_other_value_where_it_means_off() -> None:
    # SPEC LIMIT-3
    for name in ("under_mv", "stall_duty", "speed_counts"):
        assert "0 = " in LIMITS[name].text
        assert is_looser(LIMITS[name], 1, 0)
        assert not is_looser(LIMITS[name], 0, 1000)
    assert [row.name for row in LIMITS.values() if "trip off" in row.text or "trips off" in row.text] == [
        "under_mv", "rated_ma", "stall_duty", "speed_counts",
    ]  # fmt: skip


def test_limits_outlive_a_restart_of_the_board() -> None:
    # SPEC LIMIT-4
    bench = Bench()
    bench.ok("limit trip_ma 0 1234")
    again = Controller(bench.board, bench.inputs, bench.store, boot=2)
    assert again.limits["trip_ma", 0] == 1234


def test_the_digest_is_the_crc_32_of_all_limits_in_their_order() -> None:
    # SPEC LIMIT-5
    import struct
    import zlib

    board = Board(axes=2, servos=1)
    store = LimitStore(board, values={("offset_ma", 1): -5})
    fitted = {"device": 1, "axis": 2, "servo": 1}
    rows = sorted(LIMITS.values(), key=lambda row: row.number)
    values = [store[row.name, index] for row in rows for index in range(fitted[row.per.value])]
    assert store.digest() == f"{zlib.crc32(struct.pack(f'>{len(values)}i', *values)):08x}"


# ---- sampling ------------------------------------------------------------------------------------------------------


def test_log_tells_the_first_tick_and_what_the_old_logging_made() -> None:
    # SPEC LOG-1, LOG-2, LOG-3, LOG-4
    bench = Bench()
    first, made = bench.ok("log 5 6 packed")
    assert (int(first), made) == (bench.tick + 1, "0")
    bench.run(23)
    bench.inputs.set(counts=[99])
    first, made = bench.ok("log 10 65536 plain")
    assert made == "5"
    assert bench.lines[-1].split()[1] == "ok", "what was held goes before the answer"
    block = decode_data(bench.data[0].body)
    assert (block.first_tick, block.period, block.rows) == (bench.tick - 23, 5, 5)
    bench.run(21)
    assert [data.body.split() for data in bench.data[1:]] == [
        [str(int(first) + n * 10), "10", "65536", "12000"] for n in range(3)
    ]
    assert bench.ok("log 0 0 packed") == ("0", "3")
    bench.run(50)
    assert len(bench.data) == 4


@pytest.mark.parametrize("args", ["0 1 packed", "0 0 plain", "10 0 packed", "65536 1 packed", "10 8 packed"])
def test_log_refuses_what_cannot_be_sampled(args: str) -> None:
    # SPEC LOG-1
    assert Bench().refusal(f"log {args}") == "range"


def test_a_line_is_closed_in_time_though_it_is_not_full() -> None:
    # SPEC DATA-9
    bench = Bench()
    bench.ok("log 40 1 packed")
    first = bench.tick + 1
    bench.run(100)
    assert bench.data == []
    bench.run(1)
    assert bench.tick == first + 100
    assert decode(bench.data[0].body).rows == 3


def test_the_state_channel_shows_the_chain_at_work() -> None:
    bench = Bench({("dwell_ticks", 0): 40})
    bench.ok(f"log 1 {1 << 18} plain")
    bench.arm()
    bench.ok(f"rest 0 brake {bench.tick + 2}")
    bench.ramp(300)
    bench.run(60)
    words = [int(data.body.split()[3]) for data in bench.data]
    names = [{name for name in ("dwell_lock", "at_slew", "braking") if STATE_BITS[name].of(word)} for word in words]
    assert {"dwell_lock", "at_slew", "braking"} in names
    assert names[-1] == set()
    assert STATE_BITS["state"].of(words[-1]) == 1


def test_again_sends_a_kept_line_letter_for_letter() -> None:
    # SPEC LOG-5
    bench = Bench(board=Board(keep=3))
    bench.ok("log 1 1 plain")
    bench.run(5)
    old = next(line for line in bench.lines if line.startswith("D04"))
    told = len(bench.lines)
    assert bench.ok("again 4") == ()
    assert bench.lines[told].split()[1:2] == ["ok"]
    assert bench.lines[told + 1] == old
    assert bench.refusal("again 0") == "gone"
    assert bench.refusal("again 200") == "gone"
    assert bench.refusal("again 256") == "range"
    bench.ok("log 1 1 plain")
    assert bench.refusal("again 4") == "gone"


def test_data_that_finds_no_room_is_dropped_whole_and_counted() -> None:
    # SPEC KIND-4, COUNT-1, DATA-11
    bench = Bench(board=Board(transmit_bytes=512, keep=64))
    bench.ok("log 1 1 plain")
    for _ in range(40):
        bench.controller.tick()
    assert bench.controller.sampling.dropped > 0
    bench.run(1)
    got = {data.number for data in bench.data}
    assert len(got) == 41 - bench.controller.sampling.dropped
    fields = bench.ok("counters")
    assert fields[6:8] == ("41", str(41 - len(got)))
    lost = sorted(set(range(41)) - got)[0]
    told = len(bench.lines)
    assert bench.ok(f"again {lost}") == ()
    assert bench.lines[told + 1].startswith(f"D{lost:02x}")


def test_counters_tell_lines_refusals_and_repeats() -> None:
    # SPEC COUNT-1, BAD-2, BAD-3, BAD-4
    bench = Bench()
    bench.controller.receive(b"01 beat 0000\n" + b"x" * 90 + b"\n" + seal(b"01 beat") * 3)
    bench.run(1)
    assert bench.ok("counters") == ("4", "2", "1", "0", "2", "0", "0", "0", "0")
    assert [notice.fields for notice in bench.told("garbled")] == [("2",)]
    bench.controller.receive(b"what\n")
    bench.run(90)
    assert len(bench.told("garbled")) == 1
    bench.run(20)
    assert [notice.fields for notice in bench.told("garbled")] == [("2",), ("3",)]


def test_bytes_beyond_the_receive_buffer_are_counted_as_overrun() -> None:
    # SPEC BAD-6
    bench = Bench(board=Board(receive_bytes=100))
    bench.controller.receive(b"\n" * 130)
    bench.run(1)
    assert bench.ok("counters")[3] == "30"


# ---- trail ---------------------------------------------------------------------------------------------------------


def test_the_trail_is_read_back_around_the_trip() -> None:
    # SPEC TRAIL-1, TRAIL-2
    bench = Bench({("slew_up_duty", 0): 10000}, board=Board(trail=32))
    bench.run(30)
    assert bench.refusal("trail 0 0") == "gone"
    bench.arm()
    bench.ramp(3000, ticks=100)
    for n in range(60):
        bench.inputs.set(counts=[n * n], current_ma=[10 * n])
        bench.run(1)
    bench.controller.line_break()
    bench.run(1)
    trip = bench.tick
    bench.run(6)
    assert bench.refusal("trail 0 0") == "gone"
    total, payload = bench.ok("trail 0 0")
    assert total == "32"
    blocks = [decode(payload)]
    while sum(block.rows for block in blocks) < 32:
        blocks.append(decode(bench.ok(f"trail 0 {sum(block.rows for block in blocks)}")[1]))
    ticks = [block.first_tick + n for block in blocks for n in range(block.rows)]
    assert ticks == list(range(trip - 24, trip + 8)), "the trip's own tick is the first of the last quarter"
    duty = [value for block in blocks for value in block.columns[0]]
    assert duty[24:] == [0] * 8
    assert all(duty[:24])
    counts = [value for block in blocks for value in block.columns[1]]
    assert counts[23] == 59 * 59
    assert bench.refusal("trail 0 32") == "gone"
    assert bench.refusal("trail 1 0") == "index"


def test_arming_empties_the_trail() -> None:
    bench = Bench(board=Board(trail=32))
    bench.arm()
    bench.controller.line_break()
    bench.run(20)
    assert bench.ok("trail 0 0")[0] == "9"
    bench.ok("clear")
    bench.arm()
    assert bench.refusal("trail 0 0") == "gone"


# ---- starts --------------------------------------------------------------------------------------------------------


def test_boot_is_the_first_line_and_everything_is_off() -> None:
    # SPEC RUN-1, WHO-3
    bench = Bench()
    assert bench.lines == ["N00 boot 0 1 power"]
    assert (bench.state, bench.duty, bench.controller.pulses[0].pulse_ns) == ("off", 0, 0)


def test_the_capabilities_say_what_there_is() -> None:
    board = Board(caps=Cap.CURRENT, axes=2, servos=0)
    assert board.mask == 0b101101 | 1 << 18
    assert len(QUICK) > 5
