"""Packed and plain samples: round trips for every mask, block limits, the exact form of a line, and refusals."""

from __future__ import annotations

import random
from base64 import b64decode, b64encode
from itertools import pairwise

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig_link.faults import SampleFault
from ramprig_link.samples import (
    ALL_CHANNELS,
    ALL_MASK,
    ChannelRef,
    Encoder,
    SampleBlock,
    channels_of,
    decode,
    decode_data,
    decode_plain,
    encode_plain,
    rice_parameter,
)
from ramprig_link.words import (
    BLOCK_SAMPLES_MAX,
    CHANNELS,
    PAYLOAD_MAX,
    RICE_K_MAX,
    RICE_QUOTIENT_MAX,
    RICE_RESET,
    TRAIL_PAYLOAD_MAX,
)
from samples_reference import ALPHABET, reference_decode, reference_encode, to_characters

MASKS = st.integers(1, ALL_MASK).map(lambda mask: mask & ALL_MASK or 1)
NOT_CHARACTERS = [chr(code) for code in range(0x180) if chr(code) not in ALPHABET]


def values_of(ref: ChannelRef) -> st.SearchStrategy[int]:
    """Values of a channel: small ones, the ends of its width, and anything between."""
    top = 1 << (ref.width_bits - 1)
    return st.one_of(st.integers(-5, 5), st.sampled_from([-top, top - 1, 0]), st.integers(-top, top - 1))


@st.composite
def loggings(draw: st.DrawFn) -> tuple[int, int, int, list[list[int]]]:
    """A mask, a period, a first tick and rows of values."""
    mask = draw(MASKS)
    rows = draw(st.lists(st.tuples(*map(values_of, channels_of(mask))).map(list), min_size=1, max_size=40))
    return mask, draw(st.integers(1, 0xFFFF)), draw(st.integers(0, 0xFFFFFFFF)), rows


def payloads_of(
    mask: int, period: int, first_tick: int, rows: list[list[int]], *, room: int = PAYLOAD_MAX
) -> list[str]:
    encoder = Encoder(mask, period, payload_max=room)
    made = [encoder.add((first_tick + i * period) % 2**32, row) for i, row in enumerate(rows)]
    return [payload for payload in (*made, encoder.flush()) if payload is not None]


def rows_of(blocks: list[SampleBlock]) -> list[list[int]]:
    return [list(row) for block in blocks for row in zip(*block.columns, strict=True)]


# ---- round trips ---------------------------------------------------------------------------------------------------


@given(loggings())
def test_every_sample_comes_back_whatever_the_mask(logging: tuple[int, int, int, list[list[int]]]) -> None:
    mask, period, first_tick, rows = logging
    blocks = [decode(payload) for payload in payloads_of(mask, period, first_tick, rows)]
    assert rows_of(blocks) == rows
    tick = first_tick
    for block in blocks:  # SPEC DATA-11: each line says exactly which samples it has
        assert (block.first_tick, block.period, block.mask) == (tick, period, mask)
        tick = (tick + block.rows * period) % 2**32


@given(loggings())
@settings(max_examples=60)
def test_both_ways_agree_with_an_implementation_made_bit_by_bit_from_the_spec(
    logging: tuple[int, int, int, list[list[int]]],
) -> None:
    """SPEC DATA-2, DATA-3, DATA-4, DATA-5, DATA-6, DATA-7, DATA-8, DATA-9."""
    mask, period, first_tick, rows = logging
    payloads = payloads_of(mask, period, first_tick, rows)
    assert payloads == reference_encode(mask, period, first_tick, rows)
    for payload in payloads:
        block = decode(payload)
        assert reference_decode(payload) == (block.first_tick, block.period, block.mask, block.columns)


def test_long_quiet_and_lively_loggings_agree_with_the_reference_too() -> None:
    """SPEC DATA-7: past RICE_RESET residuals, with k moving up and down over lines."""
    source = random.Random(20)
    rows: list[list[int]] = []
    counts = -(2**31)
    for i in range(900):
        spread = (0, 3, 400, 70_000)[i // 60 % 4]
        counts = (counts + source.randint(-spread, spread) * 50 + 2**31) % 2**32 - 2**31
        duty = max(-10_000, min(10_000, source.randint(-spread, spread)))
        rows.append([duty, counts, source.randint(-spread, spread)])
    payloads = payloads_of(0b111, 1, 2**32 - 300, rows)
    assert payloads == reference_encode(0b111, 1, 2**32 - 300, rows)
    assert rows_of([decode(payload) for payload in payloads]) == rows


def test_counts_wrap_at_32_bits() -> None:
    """SPEC DATA-5."""
    rows = [[2**31 - 3], [2**31 - 1], [-(2**31) + 1], [-(2**31) + 3], [2**31 - 1], [-(2**31)]]
    (payload,) = payloads_of(0b10, 1, 0, rows)
    assert rows_of([decode(payload)]) == rows
    (steady,) = payloads_of(0b10, 1, 0, rows[:4])
    # A steady turn over the wrap costs what it costs anywhere.
    assert len(steady) == len(payloads_of(0b10, 1, 0, [[-3], [-1], [1], [3]])[0])


@given(MASKS, st.data())
def test_values_beyond_a_channels_width_are_held_at_its_ends(mask: int, data: st.DataObject) -> None:
    """SPEC DATA-4, in first and later samples, and in plain lines."""
    channels = channels_of(mask)
    row = data.draw(st.lists(st.integers(-(2**40), 2**40), min_size=len(channels), max_size=len(channels)))
    tops = [1 << (ref.width_bits - 1) for ref in channels]
    held = [max(-top, min(top - 1, value)) for value, top in zip(row, tops, strict=True)]
    blocks = [decode(payload) for payload in payloads_of(mask, 1, 0, [row, row])]
    assert rows_of(blocks) == [held, held]
    assert rows_of([decode_data(encode_plain(0, 1, mask, row))]) == [held]


@given(st.integers(0, 2**22), st.integers(1, RICE_RESET))
def test_the_parameter_is_the_least_that_reaches_the_mean(total: int, count: int) -> None:
    """SPEC DATA-7."""
    k = 0
    while k < RICE_K_MAX and count << k < total:
        k += 1
    assert rice_parameter(total, count) == k


# ---- the form of a line --------------------------------------------------------------------------------------------


def test_bits_are_packed_as_base64_packs_them() -> None:
    """SPEC DATA-2 against the test vectors of RFC 4648, section 10."""
    vectors = {"f": "Zg==", "fo": "Zm8=", "foo": "Zm9v", "foob": "Zm9vYg==", "fooba": "Zm9vYmE=", "foobar": "Zm9vYmFy"}
    for plain, text in vectors.items():
        assert to_characters("".join(f"{byte:08b}" for byte in plain.encode("ascii"))) == text.rstrip("=")
    assert b64encode(b64decode(ALPHABET)).decode("ascii") == ALPHABET
    assert (ALPHABET[0], ALPHABET[26], ALPHABET[52], ALPHABET[62:]) == ("A", "a", "0", "+/")  # RFC 4648, table 1


def test_header_and_first_sample_are_where_the_spec_puts_them() -> None:
    """SPEC DATA-3, DATA-4: worked by hand; duty -2 in 15 bits, counts 5 in 32."""
    bits = f"{7:032b}{10:016b}{3:020b}{1:08b}" + "111111111111110" + f"{5:032b}"
    assert payloads_of(0b11, 10, 7, [[-2, 5]]) == [to_characters(bits)]


def test_residuals_are_of_the_channels_order_and_coded_as_the_spec_says() -> None:
    """SPEC DATA-5, DATA-6, DATA-7, DATA-8: worked by hand for the state channel, order 1, and k 2 at the start.

    From 0 to 1: e 1, u 2, q 0: 0 and 10. A = 4 + 2, N = 2: k 2. To 20000: e 19999, u 39998, q 9999: the escape.
    A = 6 + 39998, N = 3: k 14. To 19999: e -1, u 1: 0 and 1 in 14 bits.
    """
    mask = 1 << CHANNELS["state"].first_bit
    bits = f"{0:032b}{1:016b}{mask:020b}{4:08b}" + "0" * 16 + "0010" + "010" + "1" * 16 + f"{39998:032b}" + f"{1:015b}"
    assert payloads_of(mask, 1, 0, [[0], [1], [20000], [19999]]) == [to_characters(bits)]


def test_the_next_line_begins_with_the_parameters_the_last_one_ended_with() -> None:
    """SPEC DATA-8."""
    encoder = Encoder(1 << 16, 1)
    for tick, value in enumerate([0, 900, 0, 900, 0]):
        assert encoder.add(tick, [value]) is None
    first = encoder.flush()
    assert first is not None
    # A = 4 + 1800 + 1799 + 1800 + 1799 over N = 5: 1440, so k is 11.
    encoder.add(5, [0])
    encoder.add(6, [1])
    second = encoder.flush()
    assert second is not None
    number = int.from_bytes(b64decode(second + "A" * (-len(second) % 4)))
    k_at = 76 + 18
    assert number >> ((len(second) + -len(second) % 4) * 6 - k_at - 4) & 15 == 11
    assert reference_decode(second)[3] == [[0, 1]]


def test_a_quiet_channel_costs_one_bit_a_sample() -> None:
    """SPEC DATA-6, DATA-7: so BLOCK_SAMPLES_MAX can be reached, and closes the line with that sample (SPEC DATA-9)."""
    encoder = Encoder(1 << 18, 1)
    closed = [encoder.add(tick, [0x101]) for tick in range(600)]
    full = [tick for tick, payload in enumerate(closed) if payload is not None]
    assert full == [BLOCK_SAMPLES_MAX - 1, 2 * BLOCK_SAMPLES_MAX - 1]
    first = closed[full[0]]
    assert first is not None
    assert decode(first).rows == BLOCK_SAMPLES_MAX
    assert encoder.oldest_tick == 2 * BLOCK_SAMPLES_MAX


@given(loggings(), st.sampled_from([TRAIL_PAYLOAD_MAX, PAYLOAD_MAX]))
def test_a_line_is_closed_only_when_the_next_sample_does_not_fit(
    logging: tuple[int, int, int, list[list[int]]], room: int
) -> None:
    """SPEC DATA-9, TRAIL-2: as many as fit, and never more characters than there is room for."""
    mask, period, first_tick, rows = logging
    payloads = payloads_of(mask, period, first_tick, rows, room=room)
    assert max(map(len, payloads)) <= room
    done = 0
    for payload, after in pairwise(payloads):
        count = decode(payload).rows
        assert decode(after).rows >= 1
        more = Encoder(mask, period, payload_max=10_000)
        more._ks = encoder_ks_before(mask, period, rows[:done], room)
        for tick, row in enumerate(rows[done : done + count + 1]):
            more.add(tick * period, row)
        longer = more.flush()
        assert longer is not None
        assert len(longer) > room
        done += count


def encoder_ks_before(mask: int, period: int, rows: list[list[int]], room: int) -> list[int]:
    """The parameters with which the line after `rows` begins."""
    encoder = Encoder(mask, period, payload_max=room)
    for tick, row in enumerate(rows):
        encoder.add(tick * period, row)
    encoder.flush()
    return encoder._ks


def test_the_oldest_tick_is_that_of_the_first_sample_held() -> None:
    encoder = Encoder(1, 5)
    seen = [encoder.oldest_tick]
    assert encoder.flush() is None
    for tick in (100, 105):
        encoder.add(tick, [1])
        seen.append(encoder.oldest_tick)
    encoder.flush()
    seen.append(encoder.oldest_tick)
    assert seen == [None, 100, 100, None]


def test_samples_that_are_not_a_period_apart_never_share_a_line() -> None:
    """SPEC DATA-9."""
    encoder = Encoder(1, 5)
    encoder.add(2**32 - 5, [1])
    assert encoder.add(0, [2]) is None
    closed = encoder.add(6, [3])
    assert closed is not None
    assert decode(closed).columns == [[1, 2]]
    assert encoder.oldest_tick == 6


def test_the_encoder_refuses_what_no_line_can_say() -> None:
    for mask, period in ((0, 1), (1 << 19, 1), (-1, 1), (1, 0), (1, 65536)):
        with pytest.raises(SampleFault):
            Encoder(mask, period)
    with pytest.raises(ValueError, match="too few"):
        Encoder(ALL_MASK, 1, payload_max=73)
    with pytest.raises(ValueError, match="longer"):
        Encoder(0b11, 1).add(0, [1])


# ---- plain lines ---------------------------------------------------------------------------------------------------


def test_a_plain_line_has_one_sample_in_decimal() -> None:
    """SPEC DATA-1."""
    assert encode_plain(4294967295, 10, 0b111, [-3000, 12, -450]) == "4294967295 10 7 -3000 12 -450"
    block = decode_data("4294967295 10 7 -3000 12 -450")
    assert block == SampleBlock(4294967295, 10, 7, 1, [[-3000], [12], [-450]])


@pytest.mark.parametrize(
    "body",
    [
        "1 1 1",  # no value
        "1 1",
        "1 1 1 1 1",  # one too many
        "1 0 1 1",  # no period
        "1 65536 1 1",
        "1 1 0",  # no channel
        "1 1 524288 1",  # bit 19
        "-1 1 1 1",
        "1 1 1 01",
        "1 1 1 +1",
        "1 1 1 2147483648",
        "1 1  1 1",
        " ",
        "1 1 1 1 ",
    ],
)
def test_a_plain_line_of_another_form_is_refused(body: str) -> None:
    """SPEC DATA-1, FIELD-1, FIELD-2."""
    with pytest.raises(SampleFault):
        decode_data(body)


# ---- refusals ------------------------------------------------------------------------------------------------------


def test_each_character_outside_the_alphabet_is_refused() -> None:
    """SPEC DATA-10."""
    (payload,) = payloads_of(0b11, 1, 0, [[0, 0]] * 4)
    for character in NOT_CHARACTERS:
        for at in (0, len(payload) // 2, len(payload)):
            with pytest.raises(SampleFault):
                decode(payload[:at] + character + payload[at + 1 :])


@given(loggings())
@settings(max_examples=40)
def test_a_shortened_or_lengthened_payload_is_refused(logging: tuple[int, int, int, list[list[int]]]) -> None:
    """SPEC DATA-10: fewer bits than needed, or six and more left over."""
    for payload in payloads_of(*logging):
        for wrong in (payload[:-1], payload[: len(payload) // 2], "", payload + "A", payload + "AAAA"):
            with pytest.raises(SampleFault):
                decode(wrong)


def test_a_left_over_bit_that_is_1_is_refused() -> None:
    """SPEC DATA-10."""
    (payload,) = payloads_of(0b1, 1, 0, [[0]])  # 76 + 15 bits: 5 left over
    spare = -(76 + 15) % 6
    for bit in range(spare):
        last = ALPHABET[ALPHABET.index(payload[-1]) | 1 << bit]
        with pytest.raises(SampleFault):
            decode(payload[:-1] + last)
    assert decode(payload[:-1] + ALPHABET[ALPHABET.index(payload[-1]) | 1 << spare]).columns == [[1]]


@pytest.mark.parametrize(
    ("period", "mask", "count"), [(1, 1, 0), (0, 1, 1), (1, 0, 1), (1, 1 << 19, 1), (1, 0xFFFFF, 1)]
)
def test_a_count_period_or_mask_that_cannot_be_is_refused(period: int, mask: int, count: int) -> None:
    """SPEC DATA-10."""
    for length in range(500):
        with pytest.raises(SampleFault):
            decode(to_characters(f"{0:032b}{period:016b}{mask:020b}{count:08b}" + "0" * length))


def test_an_escape_where_it_was_not_needed_is_taken() -> None:
    """SPEC DATA-10, with the largest k."""
    escape = "1" * RICE_QUOTIENT_MAX + f"{4:032b}"
    bits = f"{0:032b}{1:016b}{1 << 18:020b}{2:08b}" + f"{3:016b}" + f"{15:04b}" + escape
    assert decode(to_characters(bits)).columns == [[3, 5]]


@given(st.text(st.sampled_from(ALPHABET + "=-_ \n"), max_size=250) | st.text(max_size=80))
@settings(max_examples=300)
def test_any_text_is_a_block_or_a_sample_fault(text: str) -> None:
    """SPEC DATA-10, BAD-1."""
    for read in (decode, decode_data, lambda body: decode_plain(body.split(" "))):
        try:
            block = read(text)
        except SampleFault:
            pass
        else:
            assert len(block.columns) == len(channels_of(block.mask))
            assert {len(column) for column in block.columns} == {block.rows}


def mutated(payload: str, source: random.Random) -> str:
    at = source.randrange(len(payload))
    choice = source.randrange(3)
    if choice == 0:
        return payload[:at] + source.choice(ALPHABET) + payload[at + 1 :]
    if choice == 1:
        return payload[:at] + payload[at + 1 :]
    return payload[:at] + source.choice(ALPHABET) + payload[at:]


def fuzz(rounds: int, seed: int) -> tuple[int, int]:
    """Damage good payloads; the reference must take and refuse just the same ones. Returns how many of each."""
    source = random.Random(seed)
    taken = refused = 0
    for number in range(rounds):
        mask = source.choice([1, 2, 7, ALL_MASK, source.randint(1, ALL_MASK)])
        spread = 1 << source.randrange(33)
        rows = [[source.randint(-spread, spread) for _ in channels_of(mask)] for _ in range(source.randint(1, 30))]
        payload = mutated(source.choice(payloads_of(mask, 1, 0, rows)), source)
        try:
            expected = reference_decode(payload)
        except ValueError:
            expected = None
        try:
            block = decode(payload)
        except SampleFault:
            assert expected is None, f"seed {seed}, round {number}: {payload}"
            refused += 1
        else:
            assert expected == (block.first_tick, block.period, block.mask, block.columns), payload
            taken += 1
    return taken, refused


def test_damaged_payloads_are_taken_and_refused_as_the_reference_does() -> None:
    """SPEC DATA-10, BAD-1."""
    taken, refused = fuzz(400, seed=7)
    assert taken > 20
    assert refused > 20


@pytest.mark.soak
def test_very_many_damaged_payloads_are_taken_and_refused_as_the_reference_does() -> None:
    """SPEC DATA-10, BAD-1."""
    taken, refused = fuzz(60_000, seed=8)
    assert taken > 1000
    assert refused > 1000


def test_channels_are_those_of_the_protocols_table() -> None:
    assert [ref.bit for ref in ALL_CHANNELS] == list(range(19))
    assert [(ref.kind, ref.index) for ref in channels_of(0b1_0001_0000_0001_1000)] == [
        ("duty", 1),
        ("counts", 1),
        ("pulse_us", 0),
        ("supply_mv", 0),
    ]
