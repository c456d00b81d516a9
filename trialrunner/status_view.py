"""The status of a run as a few lines for a terminal; pure: a mapping in, text out."""

import math
import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

from trialrunner.operator_messages import printable

LABEL_WIDTH = 13
"""Columns of the labels on the left, with their gap."""

STYLES: Mapping[str, str] = {"halted": "red", "paused": "yellow"}
"""Colours of the states that want a person; everything else goes on by itself."""

_LEVELS = ("halt", "roll back", "freeze", "warn", "pass")


def status_lines(status: Mapping[str, Any], width: int = 80) -> Iterator[str]:
    """The block that `tell status` prints, first line first; no line is longer than `width`.

    `status` has the fields of operator_messages.STATUS_FIELDS.
    """
    rows = [
        ("run", status["run"]),
        ("state", _state(status)),
        ("", _trouble(status)),
        ("trial", _trial(status)),
        ("time", _time(status)),
        ("error norm", _norms(status)),
        ("", _progress(status)),
        ("learning", _learning(status)),
        ("so far", _counts(status)),
        *_guards(status["guards"]),
        ("rig", " ".join((status["rig"]["name"] or "not greeted yet", status["rig"]["state"]))),
        ("link", _link(status["link"])),
        ("record", status["record"]),
    ]
    for label, text in rows:
        if text:
            yield from _row(label, text, width)


def _row(label: str, text: str, width: int) -> Iterator[str]:
    room = max(20, width - LABEL_WIDTH)
    # A path is cut only where it must be, and not at its hyphens.
    lines = textwrap.wrap(printable(text), room, break_on_hyphens=False)
    for index, line in enumerate(lines):
        yield f"{'' if index else label:<{LABEL_WIDTH}}{line}"


def _state(status: Mapping[str, Any]) -> str:
    return f"over: {status['over']}" if status["over"] else str(status["state"])


def _trouble(status: Mapping[str, Any]) -> str:
    fault = status["rig"]["fault"]
    if status["state"] == "halted":
        return f"{fault or 'cause unknown'}; `tell resume --why ...` goes on"
    return str(fault)


def _trial(status: Mapping[str, Any]) -> str:
    last = status["trials_total"] - 1
    purpose = _PURPOSE.get(status["purpose"], status["purpose"])
    return f"{status['trial']} (of 0 to {last}), to {purpose}"


_PURPOSE = {
    "baseline": "measure the spread before learning",
    "learn": "learn",
    "probe": "probe the rig for the law",
    "confirm": "confirm a roll back",
    "floor": "measure the repeatability floor",
}


def _time(status: Mapping[str, Any]) -> str:
    left = status["remaining_s"]
    ahead = "" if left is None or status["over"] else f", up to {duration(left)} to go"
    return f"{duration(status['elapsed_s'])} since {_moment(status['started'])}{ahead}"


def _moment(stamp: str) -> str:
    """2026-12-01T13:10:22.123456Z to 2026-12-01 13:10:22 UTC."""
    return f"{stamp[:10]} {stamp[11:19]} UTC"


def duration(seconds: float) -> str:
    """Rounded to two units: 4 min 12 s, 3 d 7 h."""
    whole = max(0, round(seconds))
    parts = (whole // 86_400, whole // 3_600 % 24, whole // 60 % 60, whole % 60)
    first = next((index for index, part in enumerate(parts) if part), 3)
    named = list(zip(parts, ("d", "h", "min", "s"), strict=True))[first : first + 2]
    return " ".join(f"{part} {unit}" for part, unit in named)


def _norms(status: Mapping[str, Any]) -> str:
    if status["norm_last"] is None and status["norm_first"] is None:
        return "no trial has counted yet"
    best = f"best {_number(status['norm_best'])}"
    if status["best_trial"] is not None:
        best += f" (trial {status['best_trial']})"
    return f"last {_number(status['norm_last'])}   {best}   first {_number(status['norm_first'])}"


def _progress(status: Mapping[str, Any]) -> str:
    first, best, floor = status["norm_first"], status["norm_best"], status["floor"]
    parts = []
    if first and best:
        parts.append(f"the best is {first / best:.3g} times below the first")
    if floor:
        parts.append(f"repeatability floor {_number(floor)}")
    return "; ".join(parts)


def _learning(status: Mapping[str, Any]) -> str:
    gain = "" if status["gain"] == 1 else f", gain lowered to {status['gain']:.3g}"
    if status["learning"]:
        return f"on{gain}"
    by = f" by {status['frozen_by']}" if status["frozen_by"] else ""
    return f"frozen{by}{gain}"


def _counts(status: Mapping[str, Any]) -> str:
    counts = (
        _count(status["voids"], "trial void", "trials void"),
        _count(status["roll_backs"], "roll back", "roll backs"),
        _count(status["late_updates"], "late update", "late updates"),
    )
    return ", ".join(counts)


def _count(number: int, one: str, many: str) -> str:
    return f"{number or 'no'} {one if number == 1 else many}"


def _guards(guards: Mapping[str, Mapping[str, Any]]) -> Iterator[tuple[str, str]]:
    """Guards that are content in one line, the others with their reason, worst first."""
    noted = [name for name, found in guards.items() if found["level"] != "pass" or found["void"]]
    texts = [
        _guard(name, guards[name]) for name in sorted(noted, key=lambda one: _rank(guards[one]))
    ]
    content = len(guards) - len(noted)
    if content:
        texts.insert(0, f"{'' if noted else 'all '}{content} pass")
    for index, text in enumerate(texts):
        yield "" if index else "guards", text


def _guard(name: str, found: Mapping[str, Any]) -> str:
    words = [str(found["level"])] if found["level"] != "pass" else []
    return f"{', '.join([*words, *['void'] * bool(found['void'])])}: {name}: {found['reason']}"


def _rank(found: Mapping[str, Any]) -> tuple[int, bool]:
    level = found["level"]
    return _LEVELS.index(level) if level in _LEVELS else 0, not found["void"]


def _link(link: Mapping[str, Any]) -> str:
    errors = _count(link["errors"], "bad frame", "bad frames")
    return f"{'up' if link['up'] else 'DOWN'}, {errors}, {link['url']}"


def _number(value: float | None) -> str:
    return "-" if value is None or not math.isfinite(value) else f"{value:.4g}"
