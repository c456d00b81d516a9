"""The messages of the wire: frozen values, one class a row of PROTOCOL.md; pure.

A body is a MessagePack array: the type number, then the fields in the order declared here.
`encode` and `decode` are the only way in and out.
"""

from dataclasses import dataclass, fields
from enum import IntEnum
from typing import Annotated, Any, ClassVar, get_args, get_type_hints

import msgpack

from drivers import fields as kind
from drivers import limits
from drivers.errors import MessageMisuse, WireError


class RigState(IntEnum):
    """What the rig is doing, as its heartbeat says."""

    RETURNING = 0
    READY = 1
    ARMED = 2
    RUNNING = 3
    SAFE = 4


class Table(IntEnum):
    FEEDFORWARD = 0
    REFERENCE = 1


class Role(IntEnum):
    """Which list a channel belongs to."""

    INPUT = 0
    OUTPUT = 1
    AUXILIARY = 2


class StartMode(IntEnum):
    """Who starts an armed trial."""

    DAEMON = 0
    RIG = 1


class FinishReason(IntEnum):
    COMPLETE = 0
    CUT_SHORT = 1
    UNDERRUN = 2
    HALTED = 3
    FAULT = 4
    MISSED_START = 5
    NEW_SESSION = 6


class Refusal(IntEnum):
    VERSION = 1
    BUSY = 2
    NOT_READY = 3
    TABLE_UNVERIFIED = 4
    TOO_LATE = 5
    WRONG_TRIAL = 6
    TOO_LARGE = 7
    BEYOND_LIMIT = 8
    SAFE_STATE = 9
    NOT_KEPT = 10
    UNSUPPORTED = 11
    MALFORMED = 12


class FaultCode(IntEnum):
    NONE = 0
    EMERGENCY_STOP = 1
    DRIVE = 2
    LIMIT_SWITCH = 3
    WATCHDOG = 4
    UNDERRUN = 5
    HALTED = 6
    SENSOR = 7
    INTERNAL = 8
    BEYOND_LIMIT = 9


U8 = Annotated[int, kind.unsigned(8)]
U32 = Annotated[int, kind.unsigned(32)]
U64 = Annotated[int, kind.unsigned(64)]
Bool = Annotated[bool, kind.boolean]
Bound = Annotated[float, kind.bound]
Text = Annotated[str, kind.text(limits.MAX_TEXT_BYTES)]
Unit = Annotated[str, kind.text(limits.MAX_UNIT_BYTES)]
Data = Annotated[bytes, kind.blob]
StartState = Annotated[tuple[float, ...], kind.listing(kind.number, limits.MAX_CHANNELS)]
Spans = Annotated[tuple[tuple[int, int], ...], kind.listing(kind.span, limits.MAX_RANGES)]


@dataclass(frozen=True)
class Message:
    """Base of all messages. `TYPE` stands first in the body."""

    TYPE: ClassVar[int]


@dataclass(frozen=True)
class Hello(Message):
    """Daemon, numbered 1: opens a session. Answered by Greeting or Refused."""

    TYPE: ClassVar[int] = 1
    versions: Annotated[tuple[int, ...], kind.listing(kind.unsigned(8), 8)]
    name: Text


@dataclass(frozen=True)
class Greeting(Message):
    """Rig: what it is. Channels follow one by one, asked for by Describe."""

    TYPE: ClassVar[int] = 2
    number: U32
    version: U8
    name: Text
    tick_hz: U64
    period_ticks: U64
    clock_steps: Bool
    """True for a simulator whose clock may jump between trials."""
    sample_type: Annotated[str, kind.one_of("f4", "f8")]
    table_capacity: U32
    """Samples of one table that the rig can hold; a longer table is streamed."""
    max_samples: U32
    samples_kept: U32
    """Samples of the last trial kept for Resend; 0 means that none is."""
    watchdog_ms: U32
    starts: Annotated[tuple[int, ...], kind.listing(kind.unsigned(8), 2)]
    inject: Annotated[str, kind.one_of("actuator", "reference")]
    reference_owner: Annotated[str, kind.one_of("daemon", "rig")]
    reference_crc: U32
    n_inputs: U8
    n_outputs: U8
    n_auxiliary: U8


@dataclass(frozen=True)
class Describe(Message):
    """Daemon, numbered: asks for one channel. Answered by Channel."""

    TYPE: ClassVar[int] = 3
    role: U8
    index: U8


@dataclass(frozen=True)
class Channel(Message):
    """Rig: one channel. `meaning` is "" or "limited" (nonzero while the actuator is at a limit)."""

    TYPE: ClassVar[int] = 4
    number: U32
    role: U8
    index: U8
    name: Text
    unit: Unit
    low: Bound
    high: Bound
    rate_per_s: Bound
    meaning: Annotated[str, kind.one_of("", "limited")]


@dataclass(frozen=True)
class Refused(Message):
    """Rig: the numbered message was understood and not done."""

    TYPE: ClassVar[int] = 5
    number: U32
    code: U8
    text: Text


@dataclass(frozen=True)
class Done(Message):
    """Rig: the numbered message was carried out."""

    TYPE: ClassVar[int] = 6
    number: U32


@dataclass(frozen=True)
class Ping(Message):
    """Daemon: clock exchange. `sent_ns` is the daemon's clock and comes back untouched."""

    TYPE: ClassVar[int] = 7
    token: U32
    sent_ns: U64


@dataclass(frozen=True)
class Pong(Message):
    """Rig: clock exchange; ticks at which Ping came in and Pong left."""

    TYPE: ClassVar[int] = 8
    token: U32
    sent_ns: U64
    received_tick: U64
    answered_tick: U64


@dataclass(frozen=True)
class TableOpen(Message):
    """Daemon, numbered: announces a table. Answered by TableState."""

    TYPE: ClassVar[int] = 9
    table: U8
    revision: U8
    n_samples: U32
    n_channels: U8
    crc: U32
    """CRC-32C over all samples' bytes."""
    streamed: Bool


@dataclass(frozen=True)
class TableBlock(Message):
    """Daemon: consecutive samples of an open table, from sample `first` on."""

    TYPE: ClassVar[int] = 10
    table: U8
    revision: U8
    first: U32
    data: Data


@dataclass(frozen=True)
class TableClose(Message):
    """Daemon, numbered: all blocks were sent. Answered by TableState."""

    TYPE: ClassVar[int] = 11
    table: U8
    revision: U8


@dataclass(frozen=True)
class TableState(Message):
    """Rig: what it holds. `verified` means whole and of the announced CRC."""

    TYPE: ClassVar[int] = 12
    number: U32
    table: U8
    revision: U8
    verified: Bool
    missing: Spans


@dataclass(frozen=True)
class Arm(Message):
    """Daemon, numbered: makes a trial ready to start. Answered by Armed or Refused."""

    TYPE: ClassVar[int] = 13
    trial: U32
    n_samples: U32
    feedforward_crc: U32
    reference_crc: U32
    start: U8


@dataclass(frozen=True)
class Armed(Message):
    """Rig: armed; where it stands now, one number for each output."""

    TYPE: ClassVar[int] = 14
    number: U32
    trial: U32
    tick: U64
    start_state: StartState


@dataclass(frozen=True)
class Start(Message):
    """Daemon, numbered: start the armed trial at a rig tick in the future."""

    TYPE: ClassVar[int] = 15
    trial: U32
    tick: U64


@dataclass(frozen=True)
class Disarm(Message):
    """Daemon, numbered: forget the armed trial."""

    TYPE: ClassVar[int] = 16
    trial: U32


@dataclass(frozen=True)
class Started(Message):
    """Rig: sample 0 was taken at this tick."""

    TYPE: ClassVar[int] = 17
    trial: U32
    tick: U64


@dataclass(frozen=True)
class Samples(Message):
    """Rig: consecutive samples, outputs then auxiliary channels, from sample `first` on."""

    TYPE: ClassVar[int] = 18
    trial: U32
    first: U32
    data: Data


@dataclass(frozen=True)
class Finished(Message):
    """Rig: the trial is over; sent again after each Resend."""

    TYPE: ClassVar[int] = 19
    trial: U32
    reason: U8
    count: U32
    start_tick: U64
    sample_crc: U32
    """CRC-32C over the bytes of samples 0 to count - 1."""
    feedforward_crc: U32
    """CRC-32C over the feedforward that was played."""
    start_state: StartState


@dataclass(frozen=True)
class Resend(Message):
    """Daemon, numbered: asks for runs of samples again; an empty list asks for Finished alone."""

    TYPE: ClassVar[int] = 20
    trial: U32
    spans: Spans


@dataclass(frozen=True)
class Credit(Message):
    """Rig: a streamed table is in up to (not with) `have`; blocks below `upto` may be sent."""

    TYPE: ClassVar[int] = 21
    table: U8
    revision: U8
    have: U32
    upto: U32


@dataclass(frozen=True)
class Heartbeat(Message):
    """Rig: alive; sent on every change of state and at least every quarter of watchdog_ms."""

    TYPE: ClassVar[int] = 22
    state: U8
    trial: U32
    count: U32
    tick: U64
    fault: U8


@dataclass(frozen=True)
class Alive(Message):
    """Daemon: alive; sent when nothing else was for a quarter of watchdog_ms."""

    TYPE: ClassVar[int] = 23


@dataclass(frozen=True)
class Halt(Message):
    """Daemon: to the safe state now; repeated until the heartbeat says SAFE."""

    TYPE: ClassVar[int] = 24
    category: U8
    """Stop category 1 or 2 in the words of IEC 60204-1."""
    text: Text


@dataclass(frozen=True)
class Fault(Message):
    """Rig: something is wrong and the rig is in its safe state until Clear."""

    TYPE: ClassVar[int] = 25
    code: U8
    text: Text
    tick: U64


@dataclass(frozen=True)
class Clear(Message):
    """Daemon, numbered: a person asked to leave the safe state, and why."""

    TYPE: ClassVar[int] = 26
    text: Text


@dataclass(frozen=True)
class Bye(Message):
    """Daemon, numbered: the session ends; the rig rests and its watchdog sleeps."""

    TYPE: ClassVar[int] = 27


NUMBERED = (Hello, Describe, TableOpen, TableClose, Arm, Start, Disarm, Resend, Clear, Bye)
"""Messages that carry a number in the frame header and get exactly one answer."""

ANSWERS = (Greeting, Channel, Refused, Done, TableState, Armed)
"""Messages whose first field is the number that they answer."""

BY_TYPE: dict[int, type[Message]] = {cls.TYPE: cls for cls in Message.__subclasses__()}


def _kinds(cls: type[Message]) -> tuple[tuple[str, kind.Kind], ...]:
    hints = get_type_hints(cls, include_extras=True)
    return tuple((field.name, get_args(hints[field.name])[1]) for field in fields(cls))


_KINDS = {cls: _kinds(cls) for cls in BY_TYPE.values()}


def encode(message: Message) -> bytes:
    """The body of a message. Raises MessageMisuse if a field breaks the protocol."""
    cls = type(message)
    values = [getattr(message, name) for name, _ in _KINDS[cls]]
    try:
        checked = kind.check_all(_KINDS[cls], values)
    except ValueError as error:
        raise MessageMisuse(f"{cls.__name__}: {error}") from None
    packed: bytes = msgpack.packb([cls.TYPE, *checked])
    return packed


def decode(body: bytes) -> Message:
    """The message in a body. Raises WireError and nothing else, whatever the bytes."""
    values = _unpack(body)
    if not values or type(values[0]) is not int or values[0] not in BY_TYPE:
        raise WireError("type", f"unknown message type {values[:1]!r:.40}")
    cls = BY_TYPE[values[0]]
    try:
        return cls(*kind.check_all(_KINDS[cls], values[1:]))
    except ValueError as error:
        raise WireError("field", f"{cls.__name__}: {error}") from None


def _unpack(body: bytes) -> list[Any]:
    left = limits.MAX_LISTS

    def count(values: list[Any]) -> list[Any]:
        nonlocal left
        left -= 1
        if left < 0:
            raise ValueError(f"over {limits.MAX_LISTS} arrays")
        return values

    try:
        values = msgpack.unpackb(
            body,
            raw=False,
            strict_map_key=True,
            list_hook=count,
            max_array_len=limits.MAX_LIST_ITEMS,
            max_map_len=0,
            max_ext_len=0,
            max_str_len=limits.MAX_MESSAGE_BODY_BYTES,
            max_bin_len=limits.MAX_MESSAGE_BODY_BYTES,
        )
    except ValueError as error:
        text = str(error) or type(error).__name__
        raise WireError("packing", f"not one MessagePack array: {text:.80}") from None
    if type(values) is not list:
        raise WireError("packing", f"expected an array, found {type(values).__name__}")
    return values
