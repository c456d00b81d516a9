"""A replay on the terminal, or as JSON for scripts."""

from __future__ import annotations

import json
import math
from dataclasses import asdict, dataclass
from typing import Any

import click

from trialrunner.core.trial import Level, Verdict
from trialrunner.record import RecordReader
from trialrunner.replay import Replay, ReplayedTrial, Side

MAX_ROWS = 200
"""Lines of the table; a record of weeks that differs everywhere is told by its first lines."""


@dataclass(frozen=True)
class View:
    """Which trials are worth a line."""

    asked: bool
    """Other settings were asked about; otherwise the record is to be reproduced."""
    show_all: bool

    def show(self, replay: Replay, reader: RecordReader, *, verified: bool) -> None:
        """Run the replay to its end and print it."""
        raise NotImplementedError

    def wants(self, row: ReplayedTrial) -> bool:
        """Differences; what was asked about also shows each trial that a guard complained of."""
        if self.show_all:
            return True
        if not self.asked:
            return not row.same
        sides = [row.recorded] if row.replayed is None else [row.recorded, row.replayed]
        return (
            row.replayed is None
            or len({_decision(side) for side in sides}) > 1
            or any(side.worst for side in sides)
        )


class JsonView(View):
    """One JSON object; rows are printed as they come, so that memory does not grow."""

    def show(self, replay: Replay, reader: RecordReader, *, verified: bool) -> None:
        click.echo('{"rows": [', nl=False)
        separator = "\n"
        for row in replay.trials():
            if self.wants(row):
                click.echo(separator + json.dumps(_row(row), allow_nan=False), nl=False)
                separator = ",\n"
        result = {
            "record": str(reader.path),
            "trials": replay.n_trials,
            "different": replay.n_different,
            "reproduced": not replay.first_difference,
            "first_difference": replay.first_difference or None,
            "counterfactual_from": replay.counterfactual_from,
            "because": replay.because or None,
            "verified": verified,
            "chain": reader.chain_head(),
        }
        click.echo("\n], " + json.dumps(result, allow_nan=False)[1:])


class TextView(View):
    """A table, then the result in sentences."""

    def show(self, replay: Replay, reader: RecordReader, *, verified: bool) -> None:
        from rich.console import Console
        from rich.table import Table
        from rich.text import Text

        console = Console(highlight=False)
        table = Table("trial", "error norm", "recorded", "replayed", box=None, padding=(0, 2))
        shown = wanted = 0
        for row in replay.trials():
            if not self.wants(row):
                continue
            wanted += 1
            if wanted > MAX_ROWS and not self.show_all:
                continue
            style = "dim" if row.counterfactual else "yellow" if _differs(row) else ""
            table.add_row(*(Text(cell) for cell in _cells(row)), style=style)
            shown += 1
        if shown:
            console.print(table)
        if wanted > shown:
            console.print(f"{wanted - shown} more such trials (--all shows them).")
        if self.asked and replay.n_trials > wanted:
            alike = replay.n_trials - wanted
            console.print(f"{alike} more trials that both judge alike (--all shows them).")
        for text, style in self._sentences(replay):
            console.print(Text(text, style=style))
        said = "Checked; the" if verified else "The"
        console.print(
            f"{said} chain of {reader.path} ends with {reader.chain_head()}",
            style="dim",
            soft_wrap=True,
            markup=False,
        )

    def _sentences(self, replay: Replay) -> list[tuple[str, str]]:
        if not self.asked:
            if not replay.first_difference:
                return [(f"Reproduced: {replay.n_trials} trials, bit for bit.", "green")]
            return [
                (f"Not reproduced: {replay.first_difference}", "bold red"),
                (f"{replay.n_different} of {replay.n_trials} trials differ.", ""),
            ]
        start = replay.counterfactual_from
        if start is None:
            text = "The record tells of every trial: all would have been played as they were."
            return [(text, "green")]
        if start >= replay.n_trials:
            text = f"The record tells of every trial it has, and ends there: {replay.because}."
            return [(text, "yellow")]
        text = (
            f"From trial {start} on the record can no longer tell: {replay.because}. What stands "
            "in brackets judges a later trial by itself, as if all before it had been as recorded."
        )
        return [(text, "yellow")]


def _differs(row: ReplayedTrial) -> bool:
    return row.replayed is None or _decision(row.recorded) != _decision(row.replayed)


def _decision(side: Side) -> tuple[bool, Level, str]:
    return side.void, side.level, side.action


def _cells(row: ReplayedTrial) -> tuple[str, ...]:
    """A replayed side that says the same is left blank; the first difference follows if none of
    the sides shows it."""
    replayed = row.differences[0] if row.replayed is None else _words(row.replayed)
    if row.replayed is not None and _words(row.recorded) == replayed:
        replayed = "same" if row.same else row.differences[0]
    replayed = f"({replayed})" if row.counterfactual else replayed
    return str(row.index), f"{row.recorded.norm:.4g}", _words(row.recorded), replayed


def _words(side: Side) -> str:
    """Verdict, guard and number, then the action."""
    worst = side.worst
    if worst is None:
        return f"pass, {side.action}"
    word = "void" if worst.void else worst.level.word
    return f"{word} by {worst.guard} ({worst.value:.4g}, limit {worst.limit:.4g}), {side.action}"


def _row(row: ReplayedTrial) -> dict[str, Any]:
    return {
        "trial": row.index,
        "counterfactual": row.counterfactual,
        "recorded": _side(row.recorded),
        "replayed": None if row.replayed is None else _side(row.replayed),
        "differences": list(row.differences),
    }


def _side(side: Side) -> dict[str, Any]:
    return {
        "verdict": side.level.word,
        "void": side.void,
        "norm": _number(side.norm),
        "action": side.action,
        "sentence": side.sentence,
        "verdicts": [_verdict(verdict) for verdict in side.verdicts],
    }


def _verdict(verdict: Verdict) -> dict[str, Any]:
    values = asdict(verdict) | {"level": verdict.level.word}
    return values | {name: _number(values[name]) for name in ("value", "limit")}


def _number(value: float) -> float | str | None:
    """JSON has no infinity; a norm that is NaN is unknown."""
    if math.isnan(value):
        return None
    return value if math.isfinite(value) else str(value)
