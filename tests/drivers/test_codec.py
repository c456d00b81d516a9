"""Frames and stuffing by their properties, against the slow coder, and under corruption."""

import random
from typing import Any

import pytest
from cobs import cobs
from hypothesis import given
from hypothesis import strategies as st

from drivers import limits
from drivers.codec import Frame, pack_frame, unpack_frame
from drivers.errors import WireError
from drivers.framing import FrameSplitter, stuff

U32 = st.integers(0, 2**32 - 1)
BODIES = st.binary(min_size=1, max_size=limits.MAX_SERIAL_BODY_BYTES)
MAX_FRAME = limits.HEADER_BYTES + limits.MAX_SERIAL_BODY_BYTES + limits.CRC_BYTES
ZEROES_AND_FULL_RUNS = st.lists(
    st.one_of(st.just(b"\0"), st.binary(min_size=1, max_size=3), st.just(b"\x07" * 254)), max_size=6
).map(b"".join)


@given(U32, U32, BODIES)
def test_a_frame_comes_back_as_it_was_packed(session: int, sequence: int, body: bytes) -> None:
    """Session, number and body survive."""
    frame = unpack_frame(pack_frame(session, sequence, body), limits.MAX_SERIAL_BODY_BYTES)
    assert (frame.session, frame.sequence, frame.body) == (session, sequence, body)


@given(U32, U32, BODIES)
def test_frames_are_those_of_the_slow_coder(
    slow: Any, session: int, sequence: int, body: bytes
) -> None:
    """Header, body, checksum, all little-endian."""
    assert pack_frame(session, sequence, body) == slow.frame(session, sequence, body)


@given(ZEROES_AND_FULL_RUNS)
def test_stuffing_is_that_of_the_slow_coder(slow: Any, data: bytes) -> None:
    """No zero inside, one at the end, and the way back."""
    wire = stuff(data)
    assert wire == slow.stuff(data) + b"\0"
    assert wire.count(0) == 1
    assert slow.unstuff(wire[:-1]) == data


@given(st.binary(min_size=1, max_size=40).filter(lambda data: 0 not in data))
def test_unstuffing_refuses_what_the_slow_coder_refuses(slow: Any, stuffed: bytes) -> None:
    """Any bytes between two delimiters either unstuff to the same or are one counted error."""
    splitter = FrameSplitter(MAX_FRAME)
    expected = slow.unstuff(stuffed)
    assert splitter.feed(stuffed + b"\0") == ([] if expected is None else [expected])
    assert splitter.errors == ({"cobs": 1} if expected is None else {})


@given(st.binary(max_size=800))
def test_any_bytes_are_a_frame_or_one_wire_error(data: bytes) -> None:
    """Nothing but WireError, of the kind length or crc."""
    found = frame_or_error(data)
    if isinstance(found, WireError):
        assert found.kind in {"length", "crc"}
    else:
        assert pack_frame(found.session, found.sequence, found.body) == data


def frame_or_error(data: bytes) -> Frame | WireError:
    """Every other exception is a failure of the test."""
    try:
        return unpack_frame(data, limits.MAX_SERIAL_BODY_BYTES)
    except WireError as error:
        return error


@given(BODIES, st.sets(st.integers(0, 8 * MAX_FRAME - 1), min_size=1, max_size=5))
def test_up_to_five_wrong_bits_are_always_caught(body: bytes, places: set[int]) -> None:
    """The promise of CRC-32C for frames of at most 655 bytes before the checksum."""
    frame = bytearray(pack_frame(7, 3, body))
    flipped = {place % (8 * len(frame)) for place in places}
    for place in flipped:
        frame[place // 8] ^= 1 << place % 8
    with pytest.raises(WireError, match="checksum"):
        unpack_frame(bytes(frame), limits.MAX_SERIAL_BODY_BYTES)


def test_wrong_bits_in_the_longest_frame_are_caught() -> None:
    """20,000 random patterns of one to five bits, and every single bit, in a frame of 652 bytes."""
    chance = random.Random(5)
    good = pack_frame(1, 2, chance.randbytes(limits.MAX_SERIAL_BODY_BYTES))
    bits = 8 * len(good)
    patterns = [[place] for place in range(bits)]
    patterns += [chance.sample(range(bits), chance.randint(2, 5)) for _ in range(20_000)]
    for places in patterns:
        frame = bytearray(good)
        for place in places:
            frame[place // 8] ^= 1 << place % 8
        with pytest.raises(WireError):
            unpack_frame(bytes(frame), limits.MAX_SERIAL_BODY_BYTES)


def test_the_largest_frame_stays_under_the_length_that_the_checksum_protects() -> None:
    """655 bytes of data: Koopman's length for Hamming distance 6 (facts in PROTOCOL.md)."""
    assert limits.HEADER_BYTES + limits.MAX_SERIAL_BODY_BYTES <= 655


@pytest.mark.parametrize("size", [0, limits.MAX_SERIAL_BODY_BYTES + 1])
def test_bodies_of_a_wrong_length_say_what_was_expected(size: int) -> None:
    """Empty and too long are errors of the kind length, in words."""
    with pytest.raises(WireError, match=f"{size} bytes; expected 1 to 640") as caught:
        unpack_frame(pack_frame(1, 0, bytes(size)), limits.MAX_SERIAL_BODY_BYTES)
    assert caught.value.kind == "length"


@given(st.lists(BODIES, max_size=4), st.data())
def test_frames_come_out_however_the_bytes_are_cut(
    bodies: list[bytes], data: st.DataObject
) -> None:
    """A stream may arrive in any pieces."""
    frames = [pack_frame(1, number, body) for number, body in enumerate(bodies)]
    wire = b"".join(map(stuff, frames))
    cuts = sorted(data.draw(st.lists(st.integers(0, len(wire)), max_size=8)))
    splitter = FrameSplitter(MAX_FRAME)
    found = []
    for start, end in zip([0, *cuts], [*cuts, len(wire)], strict=True):
        found += splitter.feed(wire[start:end])
    assert found == frames
    assert not splitter.errors


@given(st.lists(st.binary(max_size=2000), max_size=6), BODIES)
def test_garbage_never_costs_a_frame_after_the_next_delimiter(
    garbage: list[bytes], body: bytes
) -> None:
    """Whatever went before, a delimiter and a good frame give that frame, and little is held."""
    splitter = FrameSplitter(MAX_FRAME)
    for piece in garbage:
        splitter.feed(piece)
        assert len(splitter._rest) <= MAX_FRAME + MAX_FRAME // 254 + 1
    frame = pack_frame(9, 0, body)
    assert splitter.feed(b"\0" + stuff(frame))[-1] == frame


def test_an_endless_run_without_delimiter_is_one_error_and_no_memory() -> None:
    """Ten megabytes of noise are thrown away as they come."""
    splitter = FrameSplitter(MAX_FRAME)
    for _ in range(1000):
        assert splitter.feed(b"\x55" * 10_000) == []
        assert len(splitter._rest) <= MAX_FRAME + MAX_FRAME // 254 + 1
    assert splitter.errors == {"length": 1}
    assert splitter.feed(b"\x55\0" + stuff(b"after")) == [b"after"]
    assert splitter.errors == {"length": 1}


def test_a_second_endless_run_is_a_second_error() -> None:
    """Each run counts once, also when both ends come in one piece."""
    splitter = FrameSplitter(MAX_FRAME)
    run = b"\x55" * 700
    splitter.feed(run)
    assert splitter.feed(run + b"\0" + run) == []
    assert splitter.feed(b"\0" + run + b"\0") == []
    assert splitter.errors == {"length": 3}


def test_the_longest_frame_fits_with_the_most_stuffing() -> None:
    """A frame without zeros needs the most code bytes; one byte more is refused."""
    splitter = FrameSplitter(MAX_FRAME)
    longest = b"\x01" * MAX_FRAME
    assert splitter.feed(stuff(longest)) == [longest]
    assert splitter.feed(cobs.encode(b"\x01" * (MAX_FRAME + 1)) + b"\0") == []
    assert splitter.errors == {"length": 1}
