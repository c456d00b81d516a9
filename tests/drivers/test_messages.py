"""Messages: every field is checked both ways, bad bodies are WireError and nothing else."""

import dataclasses
import math
import tracemalloc
from typing import Any, get_args, get_type_hints

import msgpack
import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers import fields, limits
from drivers.errors import MessageMisuse, WireError
from drivers.messages import (
    ANSWERS,
    BY_TYPE,
    NUMBERED,
    Alive,
    Channel,
    Done,
    Greeting,
    Heartbeat,
    Message,
    Resend,
    RigState,
    Samples,
    TableState,
    decode,
    encode,
)

TEXTS = st.text(st.characters(codec="utf-8", exclude_categories=["C", "Z"]), max_size=50)
FINITE = st.floats(allow_nan=False, allow_infinity=False)
U32 = st.integers(0, 2**32 - 1)
SPANS = st.lists(st.tuples(U32, U32), max_size=limits.MAX_RANGES).map(tuple)

BY_NAME: dict[str, st.SearchStrategy[Any]] = {
    "sample_type": st.sampled_from(["f4", "f8"]),
    "inject": st.sampled_from(["actuator", "reference"]),
    "reference_owner": st.sampled_from(["daemon", "rig"]),
    "meaning": st.sampled_from(["", "limited"]),
    "versions": st.lists(st.integers(0, 255), max_size=8).map(tuple),
    "starts": st.lists(st.integers(0, 255), max_size=2).map(tuple),
    "unit": TEXTS.map(lambda text: text.encode()[: limits.MAX_UNIT_BYTES].decode(errors="ignore")),
    "low": st.floats(allow_nan=False),
    "high": st.floats(allow_nan=False),
    "rate_per_s": st.floats(allow_nan=False),
    "start_state": st.lists(FINITE, max_size=limits.MAX_CHANNELS).map(tuple),
    "spans": SPANS,
    "missing": SPANS,
    "data": st.binary(max_size=limits.SERIAL_BLOCK_BYTES),
    "tick_hz": st.integers(0, 2**64 - 1),
}
BY_KIND = {"int": U32, "bool": st.booleans(), "str": TEXTS}


def values_of(cls: type[Message]) -> st.SearchStrategy[Message]:
    """Any message of a class; integers are as wide as the field's own limit."""
    hints = get_type_hints(cls, include_extras=True)
    drawn = {}
    for field in dataclasses.fields(cls):
        kind, check = get_args(hints[field.name])
        if field.name in BY_NAME:
            drawn[field.name] = BY_NAME[field.name]
        elif kind is int:
            drawn[field.name] = st.integers(0, widest(check))
        else:
            drawn[field.name] = BY_KIND[kind.__name__]
    return st.builds(cls, **drawn)


def widest(check: fields.Kind) -> int:
    for bits in (64, 32, 8):
        try:
            return int(check(2**bits - 1))
        except ValueError:
            continue
    raise AssertionError("an integer field of no known width")


MESSAGES = st.sampled_from(sorted(BY_TYPE.values(), key=lambda cls: cls.TYPE)).flatmap(values_of)


@given(MESSAGES)
def test_every_message_survives_the_wire(message: Message) -> None:
    """Whatever its fields, it comes back equal."""
    assert decode(encode(message)) == message


@given(MESSAGES)
def test_bodies_are_those_of_the_slow_coder(slow: Any, message: Message) -> None:
    """Type number, then the fields in the order declared, in MessagePack's shortest form."""
    values = [getattr(message, field.name) for field in dataclasses.fields(message)]
    assert encode(message) == slow.pack([type(message).TYPE, *values])


@given(MESSAGES)
def test_every_message_fits_a_serial_frame(message: Message) -> None:
    """A block of SERIAL_BLOCK_BYTES, the longest list and the longest text, each alone."""
    assert len(encode(message)) <= limits.MAX_SERIAL_BODY_BYTES


LONG = "x" * limits.MAX_TEXT_BYTES
TOP = 2**32 - 1
MANY = tuple((2**32 - 1, 2**32 - 1) for _ in range(limits.MAX_RANGES))


@pytest.mark.parametrize(
    "message",
    [
        Greeting(
            number=TOP, version=255, name=LONG, tick_hz=2**64 - 1, period_ticks=2**64 - 1,
            clock_steps=True, sample_type="f4", table_capacity=TOP, max_samples=TOP,
            samples_kept=TOP, watchdog_ms=TOP, starts=(0, 1), inject="reference",
            reference_owner="daemon", reference_crc=TOP, n_inputs=32, n_outputs=32, n_auxiliary=32,
        ),
        Channel(2**32 - 1, 2, 255, LONG, "x" * 24, 1.0, 1.0, math.inf, "limited"),
        Samples(2**32 - 1, 2**32 - 1, bytes(limits.SERIAL_BLOCK_BYTES)),
        TableState(2**32 - 1, 1, 255, False, MANY),
        Resend(2**32 - 1, MANY),
    ],
    ids=lambda message: type(message).__name__,
)  # fmt: skip
def test_the_largest_messages_fit_a_serial_frame(message: Message) -> None:
    """Their bodies with every number at its widest."""
    assert len(encode(message)) <= limits.MAX_SERIAL_BODY_BYTES


KINDS = {"packing", "type", "field"}


def kind_of(body: bytes) -> str:
    """The kind of error that a body gives, or none; every other exception fails the test."""
    try:
        decode(body)
    except WireError as error:
        return error.kind
    return ""


@given(st.binary(max_size=300))
def test_any_bytes_are_a_message_or_one_wire_error(body: bytes) -> None:
    """Accepted, or the one documented exception."""
    assert kind_of(body) in {*KINDS, ""}


PLAIN = st.one_of(
    st.none(), st.booleans(), st.integers(-(2**63), 2**64 - 1), st.floats(), st.binary(max_size=9),
    st.text(max_size=9), st.dictionaries(st.text(max_size=3), st.integers(0, 9), max_size=2),
)  # fmt: skip
NESTED = st.recursive(PLAIN, lambda inner: st.lists(inner, max_size=4), max_leaves=8)


@given(st.integers(-1, 30), st.lists(NESTED, max_size=19))
def test_wrong_fields_are_a_message_or_one_wire_error(number: int, values: list[Any]) -> None:
    """Well-formed MessagePack with any content, the type number in front."""
    body = msgpack.packb([number, *values])
    kind = kind_of(body)
    assert kind in KINDS or (not kind and number == decode(body).TYPE)


@given(MESSAGES, st.data())
def test_damaged_bodies_are_a_message_or_one_wire_error(
    message: Message, data: st.DataObject
) -> None:
    """One byte changed or some cut off, under a checksum that happens to fit."""
    body = bytearray(encode(message))
    body[data.draw(st.integers(0, len(body) - 1))] = data.draw(st.integers(0, 255))
    cut = data.draw(st.integers(0, len(body)))
    for damaged in (bytes(body), bytes(body[:cut])):
        assert kind_of(damaged) in {*KINDS, ""}


def test_a_bomb_of_empty_arrays_stays_small() -> None:
    """As many arrays as the longest body has bytes are refused before they take memory."""
    bomb = bytearray(b"\xdc\x00\x40")
    while len(bomb) < limits.MAX_MESSAGE_BODY_BYTES:
        bomb += b"\xdc\x00\x40" + b"\x90" * 63
    tracemalloc.start()
    assert kind_of(bytes(bomb)) == "packing"
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 1_000_000


def test_deep_nesting_is_kind_of() -> None:
    """Ten thousand arrays in each other are an error of the kind packing."""
    assert kind_of(b"\x91" * 10_000 + b"\x00") == "packing"


@pytest.mark.parametrize(
    ("message", "text"),
    [
        (Done(-1), "Done: number: expected an integer of 0 to 4294967295, found -1"),
        (Done(True), "Done: number"),
        (Heartbeat(RigState.READY, 0, 0, 2**64, 0), "Heartbeat: tick"),
        (Samples(1, 0, "0000"), "Samples: data: expected bytes, found str"),  # type: ignore[arg-type]
        (Resend(1, MANY + MANY), "Resend: spans: expected a list of at most 24 items"),
        (Resend(1, ((1,),)), "Resend: spans: expected .first, count."),  # type: ignore[arg-type]
        (Channel(1, 0, 0, "a\nb", "N", 0.0, 1.0, 1.0, ""), "Channel: name: expected printable"),
        (Channel(1, 0, 0, "é" * 101, "N", 0.0, 1.0, 1.0, ""), "at most 200 bytes"),
        (Channel(1, 0, 0, "a", "N" * 25, 0.0, 1.0, 1.0, ""), "Channel: unit.*24"),
        (Channel(1, 0, 0, "a", "N", math.nan, 1.0, 1.0, ""), "Channel: low: .*infinity"),
        (Channel(1, 0, 0, "a", "N", 0.0, 1.0, 1.0, "odd"), "one of , limited, found 'odd'"),
    ],
)  # fmt: skip
def test_a_message_that_breaks_the_protocol_is_never_packed(message: Message, text: str) -> None:
    """Our own mistake is MessageMisuse, naming message and field."""
    with pytest.raises(MessageMisuse, match=text):
        encode(message)


def test_numbers_may_come_in_any_width() -> None:
    """Small packers send 1 for 1.0, floats in 32 bits, or integers in more bytes than needed."""
    body = bytes.fromhex(
        "95 0e ce00000007 29 00 93 01 ca3fc00000 cbbff8000000000000".replace(" ", "")
    )
    assert decode(body).start_state == (1.0, 1.5, -1.5)  # type: ignore[attr-defined]


def test_answers_begin_with_the_number_they_answer() -> None:
    """The daemon relies on it for each of them."""
    for cls in ANSWERS:
        assert dataclasses.fields(cls)[0].name == "number"
    assert not set(ANSWERS) & set(NUMBERED)


def test_type_numbers_are_all_different() -> None:
    """One class, one number, without gaps."""
    assert sorted(BY_TYPE) == list(range(1, len(Message.__subclasses__()) + 1))


def test_a_message_without_fields_is_one_number() -> None:
    """The shortest body there is."""
    assert encode(Alive()) == bytes([0x91, Alive.TYPE])
