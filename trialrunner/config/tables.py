"""The tables of a configuration that only the shell knows; the others are the core's settings."""

from dataclasses import dataclass, field
from typing import Annotated, Any, ClassVar, Literal

from annotated_types import MaxLen
from pydantic import StringConstraints

from trialrunner.conversation.timing import LinkTiming
from trialrunner.core.bounds import STRICT, Count, Name, NonNegative

RunName = Annotated[str, StringConstraints(pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$")]


@dataclass(frozen=True, kw_only=True)
class RunTable:
    """The run."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    name: RunName
    """Names the record and the operator's sockets: letters, digits, dot, dash, underscore."""
    record: Name | None = None
    """File that holds the run, relative to the current directory; <name>.trialrecord if left
    out."""
    initial_feedforward: Name | None = None
    """CSV or NPZ file with one column for each input, relative to the configuration file: the
    feedforward of the first trial; zero if left out."""
    stop_grace_s: NonNegative = 60.0
    """After SIGTERM or SIGINT a trial under way may end by itself for this long, then it is
    stopped."""
    on_halt: Literal["wait", "exit"] = "wait"
    """When the run halts: wait for an operator to resume it, or leave with an exit code."""


@dataclass(frozen=True, kw_only=True)
class LinkTable(LinkTiming):
    """How the rig is reached, and the daemon's patience with it."""

    url: Name
    """serial:///dev/..., zmq+tcp://host:port or zmq+ipc:///path."""


@dataclass(frozen=True, kw_only=True)
class OperatorTable:
    """Where operators reach the daemon."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    command_url: Name | None = None
    """ZeroMQ address for requests (ipc://, or tcp:// on the loopback); a socket named after
    the run, in a private directory, if left out."""
    telemetry_url: Name | None = None
    """ZeroMQ address at which the state is published; likewise."""


Option = bool | int | float | str


@dataclass(frozen=True, kw_only=True)
class RehearsalTable:
    """The mock rig that `trialrunner rehearse` starts; `run` ignores this table."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    plant: Name
    """Name of the mock rig's plant."""
    link: Literal["serial", "zmq"] = "serial"
    """Serial line (pseudo-terminal) or ZeroMQ."""
    seed: Count = 0
    """Seed of the mock rig's noise and faults."""
    faults: Annotated[tuple[Name, ...], MaxLen(100)] = ()
    """Faults in the mock rig's notation, such as "drop@trial=12" or "late@p=0.02,size=0.1";
    `python -m mock_rig --help` lists them."""
    options: dict[str, Option] = field(default_factory=dict)
    """More options of the mock rig by name: table_capacity = 1000, rig_starts = true."""
