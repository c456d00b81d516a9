"""Opening a session: Hello, then every channel by Describe."""

from collections.abc import Callable

from drivers.limits import MAX_CHANNELS, PROTOCOL_VERSIONS
from drivers.messages import Channel, Describe, Greeting, Hello, Message, Refused, Role
from trialrunner.conversation.commander import Commander
from trialrunner.conversation.events import Greeted, RigEvent, RigRefused


class Greeter:
    """Asks the rig who it is and reports Greeted or RigRefused."""

    def __init__(self, commander: Commander, name: str, emit: Callable[[RigEvent], None]) -> None:
        self._commander = commander
        self._name = name
        self._emit = emit
        self._greeting: Greeting | None = None
        self._channels: dict[Role, list[Channel]] = {}

    def start(self) -> None:
        self._greeting = None
        self._channels = {role: [] for role in Role}
        self._commander.ask(Hello(PROTOCOL_VERSIONS, self._name), self._on_greeting)

    def _on_greeting(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            self._emit(RigRefused("Hello", answer.code, answer.text))
            return
        if not isinstance(answer, Greeting):
            self._refuse(f"answered Hello with {type(answer).__name__}, expected Greeting")
            return
        trouble = _trouble(answer)
        if trouble:
            self._refuse(trouble)
            return
        self._greeting = answer
        self._next_channel()

    def _wanted(self) -> tuple[Role, int] | None:
        assert self._greeting is not None
        counts = (
            (Role.INPUT, self._greeting.n_inputs),
            (Role.OUTPUT, self._greeting.n_outputs),
            (Role.AUXILIARY, self._greeting.n_auxiliary),
        )
        for role, count in counts:
            if len(self._channels[role]) < count:
                return role, len(self._channels[role])
        return None

    def _next_channel(self) -> None:
        wanted = self._wanted()
        if wanted is not None:
            self._commander.ask(Describe(*wanted), self._on_channel)
            return
        assert self._greeting is not None
        inputs, outputs, auxiliary = (tuple(self._channels[role]) for role in Role)
        self._emit(Greeted(self._greeting, inputs, outputs, auxiliary))

    def _on_channel(self, answer: Message) -> None:
        wanted = self._wanted()
        if not isinstance(answer, Channel) or (answer.role, answer.index) != wanted:
            self._refuse(f"did not describe channel {wanted}, answered {answer!r:.120}")
            return
        self._channels[Role(answer.role)].append(answer)
        self._next_channel()

    def _refuse(self, text: str) -> None:
        self._emit(RigRefused("greeting", 0, f"the rig {text}"))


def _trouble(greeting: Greeting) -> str:
    """Why a greeting cannot be worked with; empty if it can."""
    if greeting.version not in PROTOCOL_VERSIONS:
        spoken = ", ".join(map(str, PROTOCOL_VERSIONS))
        return f"chose protocol version {greeting.version}; this daemon speaks {spoken}"
    if greeting.tick_hz == 0 or greeting.period_ticks == 0 or greeting.table_capacity == 0:
        return "declares a tick rate, period or table capacity of zero"
    counts = (greeting.n_inputs, greeting.n_outputs, greeting.n_auxiliary)
    if min(counts[:2]) == 0 or max(counts) > MAX_CHANNELS:
        return (
            f"declares {counts} input, output and auxiliary channels; expected 1 to {MAX_CHANNELS}"
        )
    return ""
