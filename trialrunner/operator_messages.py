"""Requests of operators and the daemon's answers: one JSON object in one frame. Pure.

OPERATOR.md describes them for other programs. JSON, because every language has it and a person
can read it on the wire; nothing here is large or frequent.
"""

import json
import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass, field
from typing import Any

VERSION = 1
"""Of requests and answers; a daemon refuses others."""

MAX_FRAME_BYTES = 65_536
"""Of a request; the longest that can pass all checks has a tenth of it."""
MAX_ANSWER_BYTES = 1_048_576
"""What a client should accept; a status with every guard at its longest reason is below it."""
MAX_WHO = 64
MAX_WHY = 1_000
MAX_TRIAL = 2**31 - 1

_ID = re.compile(r"[0-9A-Za-z._-]{8,64}")

VERBS: Mapping[str, str] = {
    "status": "say how the run is; changes nothing",
    "pause": "stop before the next trial",
    "resume": "go on after a pause or a halt",
    "freeze": "go on with the trials, stop learning",
    "learn": "learn again after a freeze",
    "rollback": "go back to the feedforward of an earlier trial",
    "halt": "bring the rig to its safe state now",
    "end": "end the run after this trial",
    "note": "put a remark on record",
}
"""What each verb asks for, in few words."""

TARGETS = ("best", "last_good")
"""Words for the trial that a roll back returns to; otherwise its index."""

STATUS_FIELDS: Mapping[str, str] = {
    "run": "name of the run",
    "state": "idle, loading, armed, running, settling, updating, paused or halted",
    "trial": "index of the trial under way or coming next, from 0",
    "purpose": "why it is run: baseline, learn, probe, confirm or floor",
    "learning": "true while trials change the feedforward",
    "frozen_by": "who or what froze learning; empty while learning",
    "gain": "factor on the law's gain, 1 until a roll back or soft start lowers it",
    "norm_last": "error norm of the last trial; null before the first",
    "norm_best": "smallest error norm so far; null before the first trial that counts",
    "best_trial": "index of the trial with it, or null",
    "norm_first": "error norm of the first trial that counts, or null",
    "floor": "repeatability floor in the same norm, once measured, else null",
    "voids": "trials that did not count and were repeated",
    "roll_backs": "roll backs so far",
    "late_updates": "updates that missed their deadline; the old feedforward was sent again",
    "guards": "name of each guard that judged the last trial: {level, reason, value, limit, void}",
    "link": "{url, up, errors}: the line to the rig; errors counts bad frames",
    "rig": "{name, state, fault}: as the rig reports; fault is empty while all is well",
    "started": "when this daemon started, RFC 3339, UTC",
    "elapsed_s": "seconds since then",
    "trials_total": "trials after which the run ends at the latest",
    "remaining_s": "estimate until then from the last trials, or null",
    "record": "path of the record",
    "over": "why the run is over; empty while it goes on",
}
"""Fields of a status with their meaning: `data` of the answer and topic `status`."""


class BadMessage(ValueError):
    """A frame that is no request or answer; `id` is the sender's, empty if it cannot be read."""

    def __init__(self, text: str, id: str = "") -> None:
        super().__init__(text)
        self.id = id


class NoAnswer(Exception):
    """No daemon answered; the text names the address and says what to do."""


@dataclass(frozen=True)
class OperatorRequest:
    """What an operator asks for. Two with the same id are the same request, applied once."""

    id: str
    """Made by the client, unique: 8 to 64 of letters, digits, dot, dash, underscore."""
    verb: str
    who: str
    why: str = ""
    """Required for everything but `status`; the text of a `note`."""
    arguments: Mapping[str, str] = field(default_factory=dict)
    """For `rollback`: {"to": "best" | "last_good" | trial index}."""
    version: int = VERSION

    def to_json(self) -> str:
        return json_text(asdict(self))


@dataclass(frozen=True)
class OperatorAnswer:
    """What the daemon answers to one request."""

    id: str
    ok: bool
    text: str
    trial: int | None
    """Index of the trial at which the request took or will take effect; null if it cannot."""
    at: str
    """RFC 3339, UTC."""
    data: Mapping[str, Any] = field(default_factory=dict)
    version: int = VERSION

    def to_json(self) -> str:
        return json_text(asdict(self))


def parse_request(frame: bytes) -> OperatorRequest:
    """A request from one frame. Raises BadMessage with a text for the sender."""
    found = _object(frame, MAX_FRAME_BYTES)
    id_ = _readable_id(found)
    try:
        return _checked_request(found)
    except ValueError as error:
        raise BadMessage(str(error), id_) from None


def parse_answer(frame: bytes) -> OperatorAnswer:
    """An answer from one frame; a newer daemon may add keys. Raises BadMessage."""
    found = _object(frame, MAX_ANSWER_BYTES)
    trial = found.get("trial")
    if (
        type(found.get("version")) is not int
        or type(found.get("ok")) is not bool
        or not (trial is None or type(trial) is int)
        or any(type(found.get(key)) is not str for key in ("id", "text", "at"))
        or type(found.get("data")) is not dict
    ):
        raise BadMessage("the answer lacks a key or has a wrong type in it", _readable_id(found))
    return OperatorAnswer(
        id=found["id"],
        ok=found["ok"],
        text=found["text"],
        trial=trial,
        at=found["at"],
        data=found["data"],
        version=found["version"],
    )


def json_text(values: Mapping[str, Any]) -> str:
    """One line of JSON; NaN and infinity, which JSON lacks, become null."""
    try:
        return _dumps(values)
    except ValueError:
        return _dumps(_without_nan(values))


def printable(text: str) -> str:
    """Text from elsewhere (rig, operator, path) with nothing left in it that steers a terminal."""
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def _dumps(values: Any) -> str:
    return json.dumps(values, allow_nan=False, separators=(",", ":"), default=_plain)


def _plain(value: Any) -> Any:
    """NumPy's numbers and arrays as Python's; whatever else there is, as its text."""
    return _without_nan(value.tolist()) if hasattr(value, "tolist") else str(value)


def _without_nan(value: Any) -> Any:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: _without_nan(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_without_nan(item) for item in value]
    return value


def _object(frame: bytes, max_bytes: int) -> dict[str, Any]:
    """The JSON object in a frame; strict where the json module is not."""
    if len(frame) > max_bytes:
        raise BadMessage(f"expected at most {max_bytes} bytes, found {len(frame)}")
    try:
        found = json.loads(
            frame.decode("utf-8"), object_pairs_hook=_no_doubles, parse_constant=_no_constant
        )
    except BadMessage:
        raise
    except UnicodeDecodeError:
        raise BadMessage("expected JSON in UTF-8, found other bytes") from None
    except RecursionError:
        raise BadMessage("the JSON is nested too deeply") from None
    except ValueError as error:
        raise BadMessage(f"expected JSON: {error}") from None
    if not isinstance(found, dict):
        raise BadMessage(f"expected a JSON object, found {_word(found)}")
    return found


def _no_doubles(pairs: Iterable[tuple[str, Any]]) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for key, value in pairs:
        if key in found:
            raise BadMessage(f"the key {_shown(key)} stands twice in one object")
        found[key] = value
    return found


def _no_constant(word: str) -> Any:
    raise BadMessage(f"{word} is no JSON")


_REQUIRED = ("version", "id", "verb", "who")
_OPTIONAL = ("why", "arguments")


def _checked_request(found: Mapping[str, Any]) -> OperatorRequest:
    version = found.get("version", VERSION)
    if type(version) is not int or version != VERSION:
        # Told first: the keys of another version may well be others.
        raise ValueError(f"version: this daemon speaks version {VERSION}, found {_shown(version)}")
    for key in found:
        if key not in (*_REQUIRED, *_OPTIONAL):
            raise ValueError(f"unknown key {_shown(key)}; {_EXPECTED}")
    for key in _REQUIRED:
        if key not in found:
            raise ValueError(f"the key {key} is missing; {_EXPECTED}")
    verb = found["verb"]
    if not isinstance(verb, str) or verb not in VERBS:
        raise ValueError(f"verb: expected one of {', '.join(VERBS)}, found {_shown(verb)}")
    if not _is_id(found["id"]):
        raise ValueError("id: expected 8 to 64 of letters, digits, dot, dash, underscore")
    why = _line("why", found.get("why", ""), MAX_WHY)
    if not why and verb != "status":
        raise ValueError(f"why: {verb} needs a reason, which goes on record")
    who = _line("who", found["who"], MAX_WHO)
    if not who:
        raise ValueError("who: expected the name of whoever asks, found nothing")
    arguments = _checked_arguments(verb, found.get("arguments", {}))
    return OperatorRequest(id=found["id"], verb=verb, who=who, why=why, arguments=arguments)


_EXPECTED = f"expected {', '.join(_REQUIRED)}, and if wanted {' and '.join(_OPTIONAL)}"


def _checked_arguments(verb: str, found: Any) -> dict[str, str]:
    if not isinstance(found, dict):
        raise ValueError(f"arguments: expected an object, found {_word(found)}")
    allowed = ("to",) if verb == "rollback" else ()
    for key in found:
        if key not in allowed:
            listed = ", ".join(allowed) or "none"
            raise ValueError(f"arguments: {verb} takes {listed}, found {_shown(key)}")
    return {"to": checked_target(found.get("to", "best"))} if verb == "rollback" else {}


def checked_target(found: object) -> str:
    """The trial to roll back to, `best`, `last_good` or an index, as text. Raises ValueError."""
    if isinstance(found, str) and found in TARGETS:
        return found
    # Ten digits are more than MAX_TRIAL has; a longer text is not worth converting.
    if isinstance(found, str) and len(found) <= 10 and found.isascii() and found.isdigit():
        found = int(found)
    if type(found) is int and 0 <= found <= MAX_TRIAL:
        return str(found)
    raise ValueError(f"to: expected best, last_good or the index of a trial, found {_shown(found)}")


def _line(key: str, found: Any, longest: int) -> str:
    """One line of text: it goes to terminals and logs, so nothing in it may steer them."""
    if not isinstance(found, str):
        raise ValueError(f"{key}: expected text, found {_word(found)}")
    text = found.strip()
    if len(text) > longest:
        raise ValueError(f"{key}: expected at most {longest} characters, found {len(text)}")
    if not text.isprintable():
        raise ValueError(f"{key}: expected one line of printable characters")
    return text


def _is_id(found: Any) -> bool:
    return isinstance(found, str) and _ID.fullmatch(found) is not None


def _readable_id(found: Mapping[str, Any]) -> str:
    id_ = found.get("id")
    return str(id_) if _is_id(id_) else ""


_WORDS = {dict: "an object", list: "a list", str: "text", bool: "true or false", int: "a number"}


def _word(value: Any) -> str:
    return "nothing" if value is None else _WORDS.get(type(value), "a number")


def _shown(value: Any) -> str:
    """A value of the sender's in a text for the sender: short, and nothing but ASCII."""
    shown = ascii(value)
    return shown if len(shown) <= 40 else f"{shown[:37]}..."
