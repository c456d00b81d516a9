"""A frame: session, sequence number, body, CRC-32C; pure, bytes in and bytes out."""

import struct
from typing import NamedTuple

from crc32c import crc32c

from drivers import limits
from drivers.errors import WireError

_HEADER = struct.Struct("<II")
_CRC = struct.Struct("<I")
_RESIDUE = 0x48674BC7
"""CRC-32C over anything with its own CRC-32C, little-endian, behind it: one pass and no copy."""


class Frame(NamedTuple):
    session: int
    sequence: int
    """0 for an unnumbered message, else its number."""
    body: bytes


def pack_frame(session: int, sequence: int, body: bytes) -> bytes:
    """Header, body and checksum, before any stuffing."""
    covered = _HEADER.pack(session, sequence) + body
    return covered + _CRC.pack(crc32c(covered))


def unpack_frame(frame: bytes, max_body: int) -> Frame:
    """Raises WireError of the kind "length" or "crc"."""
    n_body = len(frame) - limits.HEADER_BYTES - limits.CRC_BYTES
    if not 0 < n_body <= max_body:
        raise WireError("length", f"a body of {n_body} bytes; expected 1 to {max_body}")
    if crc32c(frame) != _RESIDUE:
        raise WireError("crc", "the frame's checksum does not agree with its bytes")
    session, sequence = _HEADER.unpack_from(frame)
    return Frame(session, sequence, frame[limits.HEADER_BYTES : -limits.CRC_BYTES])
