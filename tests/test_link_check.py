"""The check of a line against published figures, and what it finds at our line lengths."""

from __future__ import annotations

import binascii
import math
import random
from itertools import permutations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig_link.check import crc16, digest, seal, unseal
from ramprig_link.host import HostLink
from ramprig_link.words import DEVICE_LINE_MAX, HOST_LINE_MAX

POLYNOMIAL = 0x11021  # SPEC CHECK-1, with its x^16 term
CODEWORD_BITS = 8 * DEVICE_LINE_MAX  # more than body and check of the longest line

# SPEC CHECK-1. Check values of the CRC catalogue for CRC-16/IBM-3740, as the PyPI packages fastcrc 0.5.0
# (`crc16.ibm_3740`) and crcmod 1.7 (`crc-ccitt-false`) give them.
CATALOGUE = [
    (b"123456789", 0x29B1),
    (b"", 0xFFFF),
    (b"\x00", 0xE1F0),
    (b"A", 0xB915),
    (b"\xff" * 4, 0x1D0F),
    (b"abcdefghijklmnopqrstuvwxyz", 0x53E2),
    (b"A" * 256, 0xEA0B),
]


def bitwise_crc(body: bytes) -> int:
    """The check by its definition, bit by bit: nothing in common with the table in `binascii`."""
    register = 0xFFFF
    for byte in body:
        for bit in range(7, -1, -1):
            carry = (register >> 15 ^ byte >> bit) & 1
            register = (register << 1 & 0xFFFF) ^ (0x1021 if carry else 0)
    return register


def remainder(bits: int) -> int:
    """`bits`, as a polynomial over GF(2), modulo the check's polynomial."""
    while bits.bit_length() > 16:
        bits ^= POLYNOMIAL << (bits.bit_length() - 17)
    return bits


def syndromes(count: int) -> list[int]:
    """x^i modulo the polynomial, for i from 0: what a flipped bit i of a codeword adds to the check."""
    found = [1]
    while len(found) < count:
        following = found[-1] << 1
        found.append(following ^ POLYNOMIAL if following >> 16 else following)
    return found


@pytest.mark.parametrize(("body", "check"), CATALOGUE, ids=lambda value: str(value)[:20])
def test_the_check_has_the_values_of_the_crc_catalogue(body: bytes, check: int) -> None:
    assert crc16(body) == check
    assert bitwise_crc(body) == check


@given(st.binary(max_size=DEVICE_LINE_MAX))
def test_the_check_is_its_definition_bit_by_bit(body: bytes) -> None:
    assert crc16(body) == bitwise_crc(body) == binascii.crc_hqx(body, 0xFFFF)


@given(st.binary(max_size=DEVICE_LINE_MAX))
def test_a_codeword_leaves_nothing(body: bytes) -> None:
    # The residue of CRC-16/IBM-3740 is 0 (CRC catalogue).
    assert crc16(body + crc16(body).to_bytes(2, "big")) == 0


def test_the_polynomial_finds_every_odd_number_of_flipped_bits() -> None:
    assert POLYNOMIAL.bit_count() % 2 == 0  # so x + 1 divides it (P. Koopman, tables of CRC polynomials)
    assert all(syndrome.bit_count() % 2 == 1 for syndrome in syndromes(CODEWORD_BITS))


def test_the_polynomial_finds_every_two_flipped_bits_in_the_longest_line() -> None:
    found = syndromes(CODEWORD_BITS)
    assert len(set(found)) == len(found)
    assert 0 not in found


def test_the_order_of_the_polynomial_is_32767_so_a_distance_of_4_holds_to_32751_data_bits() -> None:
    # P. Koopman's tables give HD = 4 to 32,751 data bits for polynomials of this order; 32767 = 32751 + 16 bits.
    # No two syndromes are equal below the order, and an odd number of flips is always found: distance 4.
    every = syndromes(32768)
    assert every[32767] == 1
    assert len(set(every[:32767])) == 32767


def test_the_polynomial_finds_every_burst_of_16_bits_or_fewer() -> None:
    # A burst of n <= 16 bits is an odd number below 2^16 (its first and last bit set), shifted; and x does not divide
    # the polynomial, so shifting makes nothing vanish.
    assert POLYNOMIAL & 1
    assert all(remainder(burst) == burst for burst in range(1, 1 << 16, 2))


def flipped(line: bytes, bits: list[int]) -> bytes:
    number = int.from_bytes(line, "big")
    for bit in bits:
        number ^= 1 << bit
    return number.to_bytes(len(line), "big")


def test_any_three_flipped_bits_of_the_body_are_found() -> None:
    """SPEC CHECK-2."""
    draw = random.Random(20)
    for _ in range(20_000):
        body = draw.randbytes(draw.randrange(1, DEVICE_LINE_MAX - 6))
        spoilt = flipped(body, draw.sample(range(8 * len(body)), draw.randrange(1, 4)))
        assert crc16(spoilt) != crc16(body), (body, spoilt)


def flips_in_digits() -> dict[int, int]:
    """For each change of a hex digit's value (exclusive-or), the fewest bits of its character that must flip."""
    fewest: dict[int, int] = {}
    for one, other in permutations("0123456789abcdef", 2):
        change = int(one, 16) ^ int(other, 16)
        flips = (ord(one) ^ ord(other)).bit_count()
        fewest[change] = min(flips, fewest.get(change, flips))
    return fewest


def flips_in_check(syndrome: int) -> int:
    """The fewest flipped bits of the four characters that change the check by `syndrome`."""
    fewest = flips_in_digits() | {0: 0}
    return sum(fewest[syndrome >> shift & 15] for shift in (0, 4, 8, 12))


def test_any_two_flipped_bits_of_a_line_are_found_in_the_digits_of_the_check_too() -> None:
    # A flipped bit can turn `b` into `c`, three bits of the value, so the binary distance does not carry over to the
    # digits. One flip in the body and one in the digits: no syndrome of a body bit is undone by one flip in the digits.
    of_body = syndromes(CODEWORD_BITS)[16:]
    assert min(map(flips_in_check, of_body)) == 2


def test_three_flipped_bits_over_body_and_digits_can_go_unseen_but_hardly_ever_do() -> None:
    # SPEC.md section 16 says so, with these figures.
    of_body = syndromes(8 * DEVICE_LINE_MAX)[16:]
    one_and_two = sum(flips_in_check(syndrome) == 2 for syndrome in of_body)
    place = {syndrome: i for i, syndrome in enumerate(of_body)}
    undone_by_one = [s << shift for s, flips in flips_in_digits().items() if flips == 1 for shift in (0, 4, 8, 12)]
    two_and_one = [
        (i, place[syndrome ^ change])
        for i, syndrome in enumerate(of_body)
        for change in undone_by_one
        if place.get(syndrome ^ change, i) < i
    ]
    assert (one_and_two, len(two_and_one)) == (5, 296)
    assert math.comb(len(of_body), 2) == 1_253_736


def test_any_burst_of_16_bits_in_the_body_is_found() -> None:
    draw = random.Random(21)
    for _ in range(5_000):
        body = draw.randbytes(draw.randrange(2, HOST_LINE_MAX))
        start = draw.randrange(8 * len(body) - 15)
        burst = [start + i for i in range(16) if i in (0, 15) or draw.random() < 0.5]
        spoilt = flipped(body, burst)
        assert crc16(spoilt) != crc16(body), (body, spoilt)


@given(st.binary(max_size=DEVICE_LINE_MAX))
def test_a_sealed_body_opens_to_itself(body: bytes) -> None:
    line = seal(body)
    assert line.endswith(b"\n")
    assert unseal(line[:-1]) == body


def test_the_digest_is_crc_32() -> None:
    # CRC-32/ISO-HDLC, check value of `123456789` in the CRC catalogue; SPEC LIMIT-5.
    assert binascii.crc32(b"123456789") == 0xCBF43926
    assert digest([0x31323334, 0x35363738]) == f"{binascii.crc32(b'12345678'):08x}"
    assert digest([-1]) == f"{binascii.crc32(bytes([255] * 4)):08x}"


def test_a_digest_changes_with_every_value_and_its_place() -> None:
    limits = [500, 500, 9000, 16000, 5]
    others = [[*limits[:i], limits[i] + 1, *limits[i + 1 :]] for i in range(len(limits))]
    swapped = [[500, 500, 16000, 9000, 5]]
    digests = [digest(values) for values in [limits, *others, *swapped, limits[:-1]]]
    assert len(set(digests)) == len(digests)


@pytest.mark.parametrize("value", [2**31, -(2**31) - 1])
def test_a_limit_beyond_32_bits_has_no_digest(value: int) -> None:
    with pytest.raises(OverflowError):
        digest([value])


def test_a_character_takes_ten_bits_on_the_line() -> None:
    # 8N1: start, 8 data, stop (SPEC LINE-1). 115200 baud: 86.8056 us a character, 11520 characters a second.
    bits = 1 + 8 + 1
    assert round(bits / 115200 * 1e6, 4) == 86.8056
    assert 115200 / bits == 11520
    assert round(122 * bits / 115200 * 1e3, 3) == 10.590  # a line of 122 bytes, in ms
    # A stop is not held up by its own length: its bytes are on the wire within 2 ms.
    assert len(HostLink.urgent_stop(0)) * bits / 115200 < 0.002
