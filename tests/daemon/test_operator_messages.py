"""Requests and answers as JSON: what is taken, what is refused and in which words."""

import json
import re
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import trialrunner
from trialrunner.clock import ManualClock
from trialrunner.observer import Observer
from trialrunner.operator_messages import (
    MAX_FRAME_BYTES,
    STATUS_FIELDS,
    VERBS,
    BadMessage,
    OperatorAnswer,
    OperatorRequest,
    json_text,
    parse_answer,
    parse_request,
)

GOOD = {"version": 1, "id": "a1b2c3d4", "verb": "pause", "who": "Ada", "why": "lunch"}


def frame(**changes: object) -> bytes:
    """A good request with keys changed, or left out where the value is ..."""
    values = {key: value for key, value in (GOOD | changes).items() if value is not ...}
    return json.dumps(values).encode()


def refusal(data: bytes) -> str:
    with pytest.raises(BadMessage) as caught:
        parse_request(data)
    return str(caught.value)


def test_a_good_request_is_read_as_sent() -> None:
    """All keys arrive; arguments may be left out."""
    assert parse_request(frame()) == OperatorRequest("a1b2c3d4", "pause", "Ada", "lunch")


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_survives_the_wire(verb: str) -> None:
    """What a client writes is what the daemon reads."""
    arguments = {"to": "last_good"} if verb == "rollback" else {}
    request = OperatorRequest("0" * 32, verb, "Ada", "because", arguments)
    assert parse_request(request.to_json().encode()) == request


@pytest.mark.parametrize(
    ("to", "read"),
    [("best", "best"), ("last_good", "last_good"), (0, "0"), (17, "17"), ("017", "17")],
)
def test_a_roll_back_names_its_trial_by_word_or_number(to: object, read: str) -> None:
    """An index may be a JSON number or text; both are one request."""
    assert parse_request(frame(verb="rollback", arguments={"to": to})).arguments == {"to": read}


def test_a_roll_back_without_target_goes_to_the_best_trial() -> None:
    """As OPERATOR.md says; said explicitly or not, it is the same request."""
    explicit = parse_request(frame(verb="rollback", arguments={"to": "best"}))
    assert parse_request(frame(verb="rollback")) == explicit


def test_status_needs_no_reason() -> None:
    """It changes nothing."""
    assert parse_request(frame(verb="status", why=...)).why == ""


@pytest.mark.parametrize("verb", [verb for verb in VERBS if verb != "status"])
@pytest.mark.parametrize("why", [..., "", "   "])
def test_everything_else_needs_a_reason(verb: str, why: object) -> None:
    """The record must be able to say why."""
    assert refusal(frame(verb=verb, why=why)).startswith(f"why: {verb} needs a reason")


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"", "expected JSON"),
        (b"pause", "expected JSON"),
        (b"\xff\xfe", "expected JSON in UTF-8"),
        (b"[]", "expected a JSON object, found a list"),
        (b"null", "expected a JSON object, found nothing"),
        (b"1e5", "expected a JSON object, found a number"),
        (b"[" * 60_000, "nested too deeply"),
        (b'{"a":' * 10_000, "nested too deeply"),
        (b" " * (MAX_FRAME_BYTES + 1), "expected at most 65536 bytes, found 65537"),
        (b'{"id":"a1b2c3d4","id":"a1b2c3d5"}', "the key 'id' stands twice"),
        (b'{"version":NaN}', "NaN is no JSON"),
        (b'{"version":-Infinity}', "-Infinity is no JSON"),
        (b"9" * 5_000, "expected JSON"),
        (frame(version=2), "version: this daemon speaks version 1, found 2"),
        (frame(version=True), "version: this daemon speaks version 1, found True"),
        (frame(version=1.0), "version: this daemon speaks version 1, found 1.0"),
        (frame(version=...), "the key version is missing"),
        (frame(id=...), "the key id is missing"),
        (frame(verb=...), "the key verb is missing"),
        (frame(who=...), "the key who is missing"),
        (frame(colour="red"), "unknown key 'colour'"),
        (frame(id="short"), "id: expected 8 to 64"),
        (frame(id="x" * 65), "id: expected 8 to 64"),
        (frame(id="a1b2c3d4\n"), "id: expected 8 to 64"),
        (frame(id=12345678), "id: expected 8 to 64"),
        (frame(verb="explode"), "verb: expected one of status, pause"),
        (frame(verb=["pause"]), "verb: expected one of"),
        (frame(verb=None), "verb: expected one of"),
        (frame(who=""), "who: expected the name"),
        (frame(who="x" * 65), "who: expected at most 64 characters, found 65"),
        (frame(who=7), "who: expected text, found a number"),
        (frame(why="x" * 1001), "why: expected at most 1000 characters, found 1001"),
        (frame(why="red\x1b[31m"), "why: expected one line of printable"),
        (frame(why="two\nlines"), "why: expected one line of printable"),
        (frame(why="\ud800"), "why: expected one line of printable"),
        (frame(why=None), "why: expected text, found nothing"),
        (frame(arguments=[]), "arguments: expected an object, found a list"),
        (frame(arguments={"to": "best"}), "arguments: pause takes none, found 'to'"),
        (frame(verb="rollback", arguments={"at": 3}), "arguments: rollback takes to, found 'at'"),
        (frame(verb="rollback", arguments={"to": -1}), "to: expected best, last_good or the index"),
        (frame(verb="rollback", arguments={"to": 2**31}), "to: expected best"),
        (frame(verb="rollback", arguments={"to": "9" * 400}), "to: expected best"),
        (frame(verb="rollback", arguments={"to": "٣"}), "to: expected best"),
        (frame(verb="rollback", arguments={"to": True}), "to: expected best"),
        (frame(verb="rollback", arguments={"to": 3.0}), "to: expected best"),
        (frame(verb="rollback", arguments={"to": {"to": {}}}), "to: expected best"),
    ],
)  # fmt: skip
def test_a_bad_request_is_refused_in_words(data: bytes, words: str) -> None:
    """Each text names the key, what was expected and what was found; it stays short."""
    text = refusal(data)
    assert words in text
    assert len(text) < 200
    assert text.isprintable()


def test_a_refusal_carries_the_id_if_it_can_be_read() -> None:
    """So that a client knows which of its requests was refused."""
    with pytest.raises(BadMessage) as caught:
        parse_request(frame(verb="explode"))
    assert caught.value.id == "a1b2c3d4"
    with pytest.raises(BadMessage) as caught:
        parse_request(frame(id="?"))
    assert caught.value.id == ""


@settings(deadline=None, derandomize=True)
@given(st.binary(max_size=300))
def test_any_bytes_are_a_request_or_refused(data: bytes) -> None:
    """Nothing but BadMessage leaves the parsers, whatever comes in."""
    for parse in (parse_request, parse_answer):
        with suppress(BadMessage):
            parse(data)


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner),
    max_leaves=6,
)


@settings(deadline=None, derandomize=True)
@given(st.fixed_dictionaries({}, optional=dict.fromkeys((*GOOD, "arguments", "extra"), JSON)))
def test_a_request_with_any_values_is_read_or_refused(values: dict[str, object]) -> None:
    """Right keys with wrong values: the same rule; what is read is safe to print and to store."""
    text = json.dumps(GOOD | values)
    with suppress(BadMessage):
        request = parse_request(text.encode())
        assert request.verb in VERBS
        assert (request.who + request.why).isprintable()


def test_an_answer_survives_the_wire() -> None:
    """Also one without a trial."""
    answer = OperatorAnswer("a1b2c3d4", False, "no", None, "2026-12-01T12:00:00Z", {"x": [1, None]})
    assert parse_answer(answer.to_json().encode()) == answer


@pytest.mark.parametrize(
    "changes", [{"ok": 1}, {"trial": "3"}, {"data": []}, {"id": None}, {"version": "1"}]
)
def test_an_answer_with_a_wrong_type_is_refused(changes: dict[str, object]) -> None:
    """A client must not take another program for a daemon."""
    answer = json.loads(OperatorAnswer("a1b2c3d4", True, "", 1, "2026").to_json())
    with pytest.raises(BadMessage, match="lacks a key or has a wrong type"):
        parse_answer(json.dumps(answer | changes).encode())


def test_an_answer_may_have_keys_of_a_later_version() -> None:
    """An older client goes on working."""
    answer = json.loads(OperatorAnswer("a1b2c3d4", True, "", 1, "2026").to_json())
    assert parse_answer(json.dumps(answer | {"later": 1}).encode()).ok


def test_numbers_that_json_lacks_become_null() -> None:
    """Also inside NumPy's arrays; a value nobody foresaw becomes text and stops nothing."""
    values = {
        "a": float("nan"), "b": [1.5, float("inf")], "c": {"d": (-float("inf"), 2)},
        "e": np.array([[1.0, np.nan]]), "f": np.float64(0.5), "g": np.int64(3), "h": Path("x"),
    }  # fmt: skip
    assert json.loads(json_text(values)) == {
        "a": None, "b": [1.5, None], "c": {"d": [None, 2]},
        "e": [[1.0, None]], "f": 0.5, "g": 3, "h": "x",
    }  # fmt: skip


def test_a_file_name_that_is_no_text_still_makes_json() -> None:
    """Such names hold lone surrogates, which UTF-8 cannot carry."""
    assert json_text({"record": b"\xff.db".decode("utf-8", "surrogateescape")}).encode()


# -- the document, against the code -------------------------------------------------------------


def rows(heading: str) -> dict[str, str]:
    """First and second cell of the tables in one chapter of OPERATOR.md."""
    text = (Path(trialrunner.__file__).parent / "OPERATOR.md").read_text(encoding="utf-8")
    chapter = text.split(f"\n## {heading}\n")[1].split("\n## ")[0]
    return dict(re.findall(r"^\| `(\w+)` \| (.*?) \|", chapter, re.MULTILINE))


def test_the_document_lists_every_status_field_with_its_meaning() -> None:
    """One list, in operator_messages; the document copies it."""
    assert rows("Status") == dict(STATUS_FIELDS)


def test_the_document_describes_every_verb() -> None:
    """And no verb that does not exist."""
    described = rows("Requests").keys() - {"version", "id", "verb", "who", "why", "arguments"}
    assert described == VERBS.keys()


def test_the_daemon_tells_exactly_the_documented_fields() -> None:
    """A field that is added there must be described here."""
    observer = Observer(
        "run", "record", "link", 3, ManualClock(), lambda *_: None, lambda *_, **__: None
    )
    assert observer.current().keys() == STATUS_FIELDS.keys()
