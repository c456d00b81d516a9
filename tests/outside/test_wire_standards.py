"""The wire against what others have published: COBS, CRC-32C, MessagePack.

All numbers were typed from memory of the named sources, none was computed by this project's code.
"""

import struct

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.codec import pack_frame, unpack_frame
from drivers.errors import WireError
from drivers.framing import FrameSplitter, stuff
from drivers.messages import (
    Alive,
    Armed,
    Done,
    Halt,
    Hello,
    Message,
    Ping,
    Resend,
    TableBlock,
    TableOpen,
    decode,
    encode,
)

RUN = bytes(range(1, 255))
"""The 254 values 01 to FE, which one code byte just covers."""

COBS = {
    # The packet of the paper: S. Cheshire, M. Baker, "Consistent overhead byte stuffing",
    # IEEE/ACM Transactions on Networking 7(2), 1999 (start of an IPv4 header).
    "paper": ("45 00 00 2C 4C 79 00 00 40 06 4F 37", "02 45 01 04 2C 4C 79 01 05 40 06 4F 37"),
    # Examples that are common practice, no source.
    "zero": ("00", "01 01"),
    "two zeros": ("00 00", "01 01 01"),
    "zeros outside": ("00 11 00", "01 02 11 01"),
    "zero inside": ("11 22 00 33", "03 11 22 02 33"),
    "no zero": ("11 22 33 44", "05 11 22 33 44"),
    "zeros behind": ("11 00 00 00", "02 11 01 01 01"),
    "full run": (RUN.hex(), "FF" + RUN.hex()),
    "zero, full run": ("00" + RUN.hex(), "01 FF" + RUN.hex()),
    "full run, one more": (RUN.hex() + "FF", "FF" + RUN.hex() + "02 FF"),
    "full run, zero": (RUN.hex() + "00", "FF" + RUN.hex() + "01 01"),
    "one short of a full run": (RUN[1:].hex() + "00 01", "FE" + RUN[1:].hex() + "02 01"),
}

ISCSI = {
    # RFC 3720 (2004), appendix B.4, as the bytes stand on the wire.
    "32 zeros": (bytes(32), "aa 36 91 8a"),
    "32 ones": (b"\xff" * 32, "43 ab a8 62"),
    "32 incrementing": (bytes(range(32)), "4e 79 dd 46"),
    "32 decrementing": (bytes(reversed(range(32))), "5c db 3f 11"),
    "read command": (
        bytes.fromhex(
            "01c00000 00000000 00000000 00000000 14000000 00000400"
            "00000014 00000018 28000000 00000000 02000000 00000000"
        ),
        "56 3a 96 d9",
    ),
    # Check value of CRC-32/ISCSI in the catalogue of parametrised CRC algorithms: E3069283.
    "check value": (b"123456789", "83 92 06 e3"),
}


@pytest.mark.parametrize(("plain", "stuffed"), COBS.values(), ids=COBS)
def test_published_packets_are_stuffed_as_published(plain: str, stuffed: str) -> None:
    """On the line a packet is its published stuffing and one zero byte."""
    assert stuff(bytes.fromhex(plain)) == bytes.fromhex(stuffed) + b"\0"


@pytest.mark.parametrize(("plain", "stuffed"), COBS.values(), ids=COBS)
def test_published_stuffing_is_understood(plain: str, stuffed: str) -> None:
    """What the sources call the stuffing of a packet is read as that packet."""
    splitter = FrameSplitter(300)
    assert splitter.feed(bytes.fromhex(stuffed) + b"\0") == [bytes.fromhex(plain)]


@given(st.binary(min_size=1, max_size=2000))
def test_stuffing_costs_one_byte_in_254_at_most(data: bytes) -> None:
    """The bound that the paper proves: one byte, and one more for each 254."""
    extra = len(stuff(data)) - len(data) - 1
    assert 1 <= extra <= 1 + len(data) // 254


@pytest.mark.parametrize(("covered", "checksum"), ISCSI.values(), ids=ISCSI)
def test_checksums_are_those_of_iscsi(covered: bytes, checksum: str) -> None:
    """A frame whose header and body are a published example ends with its published checksum."""
    session, sequence = struct.unpack("<II", covered[:8])
    frame = pack_frame(session, sequence, covered[8:])
    assert frame == covered + bytes.fromhex(checksum)
    assert unpack_frame(frame, 640).body == covered[8:]


@given(
    st.binary(min_size=1, max_size=640),
    st.data(),
    st.integers(min_value=1, max_value=(1 << 32) - 1),
)
def test_every_burst_of_up_to_32_bits_is_caught(
    body: bytes, data: st.DataObject, burst: int
) -> None:
    """A CRC of 32 bits catches all bursts of 32 (Peterson and Brown, Proc. IRE 49, 1961)."""
    frame = pack_frame(7, 0, body)
    # The checksum takes the lowest bit of each byte first, which is how a little-endian number
    # lies in memory, so that neighbouring bits of this number are neighbours on the line.
    shift = data.draw(st.integers(min_value=0, max_value=8 * len(frame) - burst.bit_length()))
    wrong = int.from_bytes(frame, "little") ^ burst << shift
    with pytest.raises(WireError) as caught:
        unpack_frame(wrong.to_bytes(len(frame), "little"), 640)
    assert caught.value.kind == "crc"


MESSAGEPACK = {
    # The formats of the MessagePack specification (version of 2017): first byte, then big-endian.
    "fixarray": (Alive(), "91 17"),
    "fixint": (Done(127), "92 06 7f"),
    "uint 8": (Done(128), "92 06 cc 80"),
    "uint 16": (Done(256), "92 06 cd 0100"),
    "uint 32": (Done(65536), "92 06 ce 00010000"),
    "uint 64": (Ping(0, 1 << 32), "93 07 00 cf 0000000100000000"),
    "bool": (TableOpen(0, 1, 2, 3, 4, True), "97 09 00 01 02 03 04 c3"),
    "fixstr": (Hello((1,), "\u00e9"), "93 01 91 01 a2 c3a9"),
    "str 8": (Halt(2, "x" * 32), "93 18 02 d9 20" + 32 * "78"),
    "bin 8": (TableBlock(0, 0, 0, b"\0\xff"), "95 0a 00 00 00 c4 02 00ff"),
    "bin 16": (TableBlock(0, 0, 0, bytes(256)), "95 0a 00 00 00 c5 0100" + 256 * "00"),
    "float 64": (
        Armed(1, 2, 3, (1.0, -0.5)),
        "95 0e 01 02 03 92 cb 3ff0000000000000 cb bfe0" + 12 * "0",
    ),
    "array 16": (Resend(5, ((0, 1),) * 16), "93 14 05 dc 0010" + 16 * "920001"),
}


@pytest.mark.parametrize(("message", "body"), MESSAGEPACK.values(), ids=MESSAGEPACK)
def test_bodies_are_made_of_specified_formats(message: Message, body: str) -> None:
    """Each format that the wire uses, written and read as the specification says."""
    assert encode(message) == bytes.fromhex(body)
    assert decode(bytes.fromhex(body)) == message


WIDER = {
    "uint 64 for a small number": (Done(5), "92 06 cf 0000000000000005"),
    "int 8 for a positive number": (Done(5), "92 06 d0 05"),
    "int 64 for a positive number": (Done(5), "92 06 d3 0000000000000005"),
    "float 32": (Armed(1, 2, 3, (1.5,)), "95 0e 01 02 03 91 ca 3fc00000"),
    "str 16": (Halt(2, "x"), "93 18 02 da 0001 78"),
    "bin 32": (TableBlock(0, 0, 0, b"\x07"), "95 0a 00 00 00 c6 00000001 07"),
    "array 32 outside": (Alive(), "dd 00000001 17"),
}


@pytest.mark.parametrize(("message", "body"), WIDER.values(), ids=WIDER)
def test_wider_formats_than_needed_are_understood(message: Message, body: str) -> None:
    """The specification lets a packer choose a wider format, and small ones do."""
    assert decode(bytes.fromhex(body)) == message


@pytest.mark.parametrize(
    ("body", "kind"),
    [
        ("92 06 c0", "field"),
        ("92 06 ff", "field"),
        ("92 06 c2", "field"),
        ("95 0a 00 00 00 a1 78", "field"),
        ("93 18 02 c4 01 78", "field"),
        ("95 0e 01 02 03 91 cb 7ff8000000000000", "field"),
        ("81 06 05", "packing"),
        ("92 06 d4 01 00", "packing"),
        ("92 06 c1", "packing"),
        ("93 18 02 a1 ff", "packing"),
        ("92 06", "packing"),
        ("92 06 05 05", "packing"),
    ],
    ids=[
        "nil",
        "negative",
        "bool for a number",
        "str for bin",
        "bin for str",
        "NaN",
        "map",
        "ext",
        "byte that is never used",
        "no UTF-8",
        "cut off",
        "bytes behind",
    ],
)
def test_formats_that_have_no_place_are_refused(body: str, kind: str) -> None:
    """Specified formats that the wire does not use, and what the specification forbids."""
    with pytest.raises(WireError) as caught:
        decode(bytes.fromhex(body))
    assert caught.value.kind == kind
