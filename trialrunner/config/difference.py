"""What changed between two configurations, for a run that is to be resumed."""

from collections.abc import Iterator, Mapping
from typing import Any

from trialrunner.config.lines import Path
from trialrunner.config.problems import ConfigError, dotted, shown
from trialrunner.config.reading import load_text

FREE: tuple[Path, ...] = (
    ("link",),
    ("operator",),
    ("rehearsal",),
    ("run", "record"),
    ("run", "stop_grace_s"),
    ("run", "on_halt"),
    ("stop", "trials"),
    ("stop", "tolerance"),
    ("stop", "stall_trials"),
    ("stop", "stall_improvement"),
    ("stop", "floor_trials"),
)
"""What may differ in a resumed run: how the rig and the operators are reached, what a rehearsal
does, where the record lies, and when the run ends. None of it changes what a trial is, what it
teaches or how it is judged, so the recorded history stays comparable. `stop.baseline_trials` is
not among them: the baseline lies in the recorded past."""


def config_difference(old_text: str, new_text: str) -> list[str]:
    """Differences that forbid to resume, as `path: old -> new`; empty if there is none.

    Settings left out count with their defaults. Raises ConfigError for a new text that is wrong;
    an old one that this version cannot read is itself the difference.
    """
    new = load_text(new_text, source="new configuration")
    try:
        old = load_text(old_text, source="recorded configuration")
    except ConfigError as error:
        return [f"recorded configuration: not readable by this version: {error}"]
    return list(_differences(old.model_dump(mode="python"), new.model_dump(mode="python"), ()))


def _differences(old: Any, new: Any, path: Path) -> Iterator[str]:
    if path in FREE or old == new:
        return
    if isinstance(old, Mapping) and isinstance(new, Mapping):
        for key in {**old, **new}:
            yield from _differences(old.get(key), new.get(key), (*path, key))
    elif _is_rows(old) and _is_rows(new) and len(old) == len(new):
        for index, (before, after) in enumerate(zip(old, new, strict=True)):
            yield from _differences(before, after, (*path, index))
    else:
        yield f"{dotted(path)}: {_shown(old)} -> {_shown(new)}"


def _is_rows(value: Any) -> bool:
    return isinstance(value, list | tuple)


def _shown(value: Any) -> str:
    if value is None:
        return "left out"
    if isinstance(value, list | tuple) and value and isinstance(value[0], Mapping):
        return f"{len(value)} tables"
    return shown(value)
