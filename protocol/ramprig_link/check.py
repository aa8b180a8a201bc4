"""The check at the end of every line, and the digest of the limits (SPEC.md CHECK-1, LIMIT-5)."""

from __future__ import annotations

from binascii import crc32, crc_hqx
from collections.abc import Iterable

CHECK_LENGTH = 5  # a space and four hex digits


def crc16(body: bytes) -> int:
    """The CRC-16/IBM-3740 of `body`: `123456789` gives 0x29b1 (CRC catalogue)."""
    return crc_hqx(body, 0xFFFF)


def seal(body: bytes) -> bytes:
    """The whole line for `body`: check and LF added."""
    return b"%b %04x\n" % (body, crc_hqx(body, 0xFFFF))


def unseal(line: bytes) -> bytes | None:
    """The body of a line without its LF; None where the check is missing, wrong, or not spelt in lower case."""
    body = line[:-CHECK_LENGTH]
    return body if line[-CHECK_LENGTH:] == b" %04x" % crc_hqx(body, 0xFFFF) else None


def digest(values: Iterable[int]) -> str:
    """Eight hex digits for all limits in the order of SPEC.md LIMIT-5.

    OverflowError where a value does not fit 32 bits signed. `123456789` would give cbf43926 (CRC-32/ISO-HDLC).
    """
    return f"{crc32(b''.join(value.to_bytes(4, 'big', signed=True) for value in values)):08x}"
