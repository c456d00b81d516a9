"""A sweep on the terminal, as JSON, as a TOML fragment and as a picture."""

from __future__ import annotations

import json
import math
from typing import Any
from xml.sax.saxutils import escape

import click

from trialrunner.config.toml_text import apply_overrides, write_toml
from trialrunner.sweep import Point, Sweep

MAX_ROWS = 60

CAUTION = (
    "Guards alone were asked, of the trials as they were played: alarms after a setting's first "
    "are counted as if nobody had obeyed it."
)
NO_SETTING = (
    "No setting of the grid is free of false alarms: none is recommended. Take a wider grid, or "
    "look at the trials that raise them with replay --set."
)


def show_text(found: Sweep) -> None:
    """A table with the best settings first, then what to make of it."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False)
    columns = [axis.key.removeprefix("guards.") for axis in found.axes]
    table = Table(
        *columns, "false alarms", "missed", "worst delay", "mean delay", "margin", box=None
    )
    for point in ranked(found)[:MAX_ROWS]:
        style = "green" if point is found.recommended else ""
        table.add_row(*(Text(cell) for cell in _cells(point)), style=style)
    console.print(table)
    if len(found.points) > MAX_ROWS:
        console.print(f"{len(found.points) - MAX_ROWS} more settings (--json has them all).")
    for sentence in sentences(found):
        console.print(Text(sentence))


def ranked(found: Sweep) -> list[Point]:
    """The recommended one first, then by false alarms, misses and delay."""
    best = found.recommended

    def order(point: Point) -> tuple[bool, int, int, float]:
        delay = math.inf if point.worst_delay is None else point.worst_delay
        return point is not best, point.false_alarms, point.missed, delay

    return sorted(found.points, key=order)


def _cells(point: Point) -> tuple[str, ...]:
    values = [text.partition("=")[2] for text in point.overrides]
    worst = "-" if point.worst_delay is None else str(point.worst_delay)
    mean = "-" if point.mean_delay is None else f"{point.mean_delay:.3g}"
    margin = "-" if point.margin is None else str(point.margin)
    return (*values, str(point.false_alarms), str(point.missed), worst, mean, margin)


def sentences(found: Sweep) -> list[str]:
    lines = [
        f"{len(found.points)} settings; {found.healthy_trials} healthy trials, "
        f"{found.faulty_records} records with a fault. {CAUTION}"
    ]
    lines += [
        f"{path}: the run's own guards acted after trial {trial}; later trials are not what "
        "another setting would have met."
        for path, trial in found.acted
    ]
    best = found.recommended
    if best is None:
        return [*lines, NO_SETTING]
    text = f"Recommended: {', '.join(best.overrides)}: no false alarm"
    if found.faulty_records:
        text += f", {best.missed} missed"
        text += "" if best.worst_delay is None else f", worst delay {best.worst_delay} trials"
    else:
        text += "; without a record of a fault (--fault-at) nothing is known of delay"
    if best.margin == 1:
        text += "; a neighbour in the grid has false alarms, so there is little margin"
    return [*lines, text + "."]


def to_json(found: Sweep) -> dict[str, Any]:
    """Every setting, JSON-ready."""
    best = found.recommended
    return {
        "axes": {axis.key: list(axis.values) for axis in found.axes},
        "healthy_trials": found.healthy_trials,
        "faulty_records": found.faulty_records,
        "acted": dict(found.acted),
        "points": [_point(point) for point in found.points],
        "recommended": None if best is None else _point(best),
    }


def _point(point: Point) -> dict[str, Any]:
    names = ("false_alarms", "missed", "worst_delay", "mean_delay", "margin")
    return {"set": list(point.overrides)} | {name: getattr(point, name) for name in names}


def show_json(found: Sweep) -> None:
    click.echo(json.dumps(to_json(found), allow_nan=False))


def fragment(found: Sweep) -> str | None:
    """The recommended setting as TOML to be pasted into a configuration; None without one."""
    best = found.recommended
    if best is None:
        return None
    document: dict[str, Any] = {}
    apply_overrides(document, best.overrides)
    comment = "\n".join(f"# {line}" for line in sentences(found))
    return f"{comment}\n\n{write_toml(document)}"


# -- the picture --------------------------------------------------------------------------------

WIDTH, HEIGHT, EDGE = 640, 420, 60


def svg(found: Sweep) -> str:
    """Each setting as a dot: false alarms to the right, worst delay upwards, misses on top."""
    best = found.recommended
    most_alarms = max(1, *(point.false_alarms for point in found.points))
    most_delay = max(1, *(point.worst_delay or 0 for point in found.points))
    missed_at = most_delay * 1.15

    def across(alarms: float) -> float:
        return EDGE + (WIDTH - 2 * EDGE) * alarms / most_alarms

    def up(delay: float) -> float:
        return HEIGHT - EDGE - (HEIGHT - 2 * EDGE) * delay / missed_at

    parts = _frame(across, up, most_alarms, most_delay, missed_at if _any_missed(found) else None)
    for point in sorted(found.points, key=lambda one: one is best):
        x, y = across(point.false_alarms), up(_height(point, missed_at))
        parts.append(_dot(x, y, point, best=point is best))
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{WIDTH}" height="{HEIGHT}" '
        f'viewBox="0 0 {WIDTH} {HEIGHT}" font-family="sans-serif" font-size="12">'
    )
    return "\n".join([head, *parts, "</svg>", ""])


def _any_missed(found: Sweep) -> bool:
    return any(point.missed for point in found.points)


def _height(point: Point, missed_at: float) -> float:
    return missed_at if point.missed else float(point.worst_delay or 0)


def _dot(x: float, y: float, point: Point, *, best: bool) -> str:
    fill, radius = ("#1a7f37", 7) if best else ("#5b6b7b", 4)
    title = f"{', '.join(point.overrides)}: {point.false_alarms} false alarms, "
    title += f"{point.missed} missed, worst delay {point.worst_delay}"
    circle = f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius}" fill="{fill}" fill-opacity="0.7">'
    return f"{circle}<title>{escape(title)}</title></circle>"


def _frame(
    across: Any, up: Any, most_alarms: int, most_delay: int, missed_at: float | None
) -> list[str]:
    left, right, low = across(0), across(most_alarms), up(0)
    parts = [
        f'<rect width="{WIDTH}" height="{HEIGHT}" fill="white"/>',
        f'<path d="M{left} {EDGE / 2}V{low}H{right}" fill="none" stroke="black"/>',
        _text((left + right) / 2, HEIGHT - 15, "false alarms (trials)"),
        _text(left, 18, "worst delay (trials)"),
    ]
    for alarms in sorted({0, most_alarms // 2, most_alarms}):
        parts.append(_text(across(alarms), low + 20, str(alarms)))
    for delay in sorted({0, most_delay // 2, most_delay}):
        parts.append(_text(left - 25, up(delay) + 4, str(delay)))
    if missed_at is not None:
        parts.append(_text(left - 28, up(missed_at) + 4, "missed"))
    return parts


def _text(x: float, y: float, words: str) -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="middle">{escape(words)}</text>'
