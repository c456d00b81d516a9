"""The published examples, read in both directions: what is sent, and what is understood."""

import tomllib
from collections import Counter
from importlib import resources
from typing import Any

import pytest

from drivers import limits
from drivers.codec import pack_frame, unpack_frame
from drivers.errors import WireError
from drivers.framing import FrameSplitter, stuff
from drivers.messages import BY_TYPE, Message, Samples, TableBlock, decode, encode

MAX_FRAME = limits.HEADER_BYTES + limits.MAX_SERIAL_BODY_BYTES + limits.CRC_BYTES

VECTORS = tomllib.loads(resources.files("drivers").joinpath("vectors.toml").read_text("utf-8"))
MESSAGES, BOUNDARIES, BAD, STREAMS = (
    VECTORS[key] for key in ("message", "boundary", "bad", "stream")
)
CLASSES = {cls.__name__: cls for cls in BY_TYPE.values()}


def as_message(vector: dict[str, Any]) -> Message:
    """The message that a vector's fields describe."""
    fields = {key: _frozen(value) for key, value in vector["fields"].items()}
    if vector["name"] in (TableBlock.__name__, Samples.__name__):
        fields["data"] = bytes.fromhex(fields["data"])
    return CLASSES[vector["name"]](**fields)


def _frozen(value: Any) -> Any:
    return tuple(map(_frozen, value)) if isinstance(value, list) else value


def name_of(vector: dict[str, Any]) -> str:
    return str(vector.get("name") or vector.get("why") or vector.get("frame_bytes"))


class Receiver:
    """What a side does with bytes: split, check, understand; errors are counted."""

    def __init__(self) -> None:
        self._splitter = FrameSplitter(MAX_FRAME)
        self.errors: Counter[str] = self._splitter.errors
        self.messages: list[Message] = []

    def feed(self, data: bytes) -> None:
        for frame in self._splitter.feed(data):
            try:
                body = unpack_frame(frame, limits.MAX_SERIAL_BODY_BYTES).body
                self.messages.append(decode(body))
            except WireError as error:
                self.errors[error.kind] += 1


def test_every_message_type_has_an_example() -> None:
    """A stranger finds each message at least once."""
    assert {vector["name"] for vector in MESSAGES} == set(CLASSES)


@pytest.mark.parametrize("vector", MESSAGES, ids=name_of)
def test_messages_are_sent_as_published(vector: dict[str, Any]) -> None:
    """Fields to body, body to frame, frame to wire, byte for byte."""
    body = encode(as_message(vector))
    frame = pack_frame(vector["session"], vector["sequence"], body)
    assert body.hex() == vector["body"]
    assert frame.hex() == vector["frame"]
    assert stuff(frame).hex() == vector["wire"]


@pytest.mark.parametrize("vector", MESSAGES, ids=name_of)
@pytest.mark.parametrize("chunk", [10_000, 1, 3])
def test_messages_are_understood_as_published(vector: dict[str, Any], chunk: int) -> None:
    """Whole, byte by byte, in threes, and with bytes of the next frame behind."""
    wire = bytes.fromhex(vector["wire"])
    splitter = FrameSplitter(MAX_FRAME)
    frames = []
    for at in range(0, len(wire), chunk):
        frames += splitter.feed(wire[at : at + chunk])
    assert [frame.hex() for frame in frames] == [vector["frame"]]
    trailing = FrameSplitter(MAX_FRAME).feed(wire + wire[:5])
    assert trailing == frames
    found = unpack_frame(frames[0], limits.MAX_SERIAL_BODY_BYTES)
    assert (found.session, found.sequence) == (vector["session"], vector["sequence"])
    assert found.body.hex() == vector["body"]
    assert decode(found.body) == as_message(vector)


@pytest.mark.parametrize("vector", MESSAGES, ids=name_of)
def test_the_slow_coder_agrees_with_the_examples(vector: dict[str, Any], slow: Any) -> None:
    """The examples are what the description says, not what the codec happens to do."""
    message = as_message(vector)
    values = [getattr(message, name) for name in vector["fields"]]
    body = slow.pack([type(message).TYPE, *values])
    assert body.hex() == vector["body"]
    assert slow.frame(vector["session"], vector["sequence"], body).hex() == vector["frame"]
    assert slow.wire(vector["session"], vector["sequence"], body).hex() == vector["wire"]


@pytest.mark.parametrize("vector", BOUNDARIES, ids=name_of)
def test_boundary_lengths_pass_both_ways(vector: dict[str, Any], slow: Any) -> None:
    """Around the 254 bytes of a full run, and the longest body, each byte by byte too."""
    body, wire = bytes.fromhex(vector["body"]), bytes.fromhex(vector["wire"])
    frame = pack_frame(vector["session"], vector["sequence"], body)
    assert len(frame) == vector["frame_bytes"]
    assert stuff(frame) == wire == slow.wire(vector["session"], vector["sequence"], body)
    splitter = FrameSplitter(MAX_FRAME)
    assert [f for byte in wire for f in splitter.feed(bytes([byte]))] == [frame]
    assert not splitter.errors
    assert unpack_frame(frame, limits.MAX_SERIAL_BODY_BYTES).body == body


@pytest.mark.parametrize("vector", BAD, ids=name_of)
@pytest.mark.parametrize("chunk", [10_000, 1])
def test_bad_frames_are_counted_and_nothing_else(vector: dict[str, Any], chunk: int) -> None:
    """One error of the published kind; the frame after it is taken."""
    receiver = Receiver()
    good = bytes.fromhex(MESSAGES[0]["wire"])
    wire = bytes.fromhex(vector["wire"]) + good
    for at in range(0, len(wire), chunk):
        receiver.feed(wire[at : at + chunk])
    assert receiver.errors == {vector["error"]: 1}
    assert receiver.messages == [as_message(MESSAGES[0])]


@pytest.mark.parametrize("vector", STREAMS, ids=name_of)
@pytest.mark.parametrize("chunk", [10_000, 1])
def test_disturbed_lines_resynchronise_as_published(vector: dict[str, Any], chunk: int) -> None:
    """What comes out of a line with disturbances, and what is counted."""
    receiver = Receiver()
    wire = bytes.fromhex(vector["wire"])
    for at in range(0, len(wire), chunk):
        receiver.feed(wire[at : at + chunk])
    assert [type(message).TYPE for message in receiver.messages] == vector["types"]
    assert receiver.errors == vector["errors"]
