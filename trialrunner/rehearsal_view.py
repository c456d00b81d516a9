"""A rehearsal on the terminal: one line a trial while it runs, then the result."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from rich.console import Console
from rich.live import Live
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from trialrunner.rehearsal import FLOORS, Progress, Summary

BAR_WIDTH = 26
"""Letters of the error bar."""

INDENT = 7
"""Columns before an explanation: under the error norm."""

DECADES = 3.0
"""Decades of error that the bar spans, from the first error downwards."""

BLOCKS = " ▏▎▍▌▋▊▉█"


def show(messages: Iterable[Progress | Summary], quiet: bool = False) -> Summary:
    """Show progress and the result; returns the summary."""
    console = Console(quiet=quiet, highlight=False)
    view = TrialLines(console)
    result: Summary | None = None
    with Live(console=console, refresh_per_second=8, transient=True) as live:
        for message in messages:
            if isinstance(message, Summary):
                result = message
            else:
                view.take(message)
                live.update(view.footer())
    assert result is not None
    console.print(summary_table(result))
    console.print(verdict_line(result))
    return result


class TrialLines:
    """Lines of finished trials go up; the line of the run as a whole stays below."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._status: dict[str, Any] = {}
        self._first: float | None = None
        self._header_shown = False

    def take(self, message: Progress) -> None:
        if message.topic == "status":
            self._status = message.values
        elif message.topic == "trial":
            self._header()
            self._console.print(self._line(message.values))
            if message.values["void"] or message.values["verdict"] != "pass":
                self._explain(message.values["sentence"])
        elif message.topic == "event" and message.values.get("kind") == "link":
            self._explain(message.values["text"])

    def _explain(self, text: str) -> None:
        """Under the line that it explains, wrapped and indented."""
        self._console.print(Padding(Text(text, style="yellow"), (0, 2, 0, INDENT)))

    def _header(self) -> None:
        if not self._header_shown:
            self._header_shown = True
            head = f"{'trial':>5}  {'error norm':>10}  {'best':>10}  {'':<{BAR_WIDTH}}  verdict"
            self._console.print(Text(head, style="dim"))

    def _line(self, trial: dict[str, Any]) -> Text:
        norm, best = trial["norm"], trial["best"]
        if self._first is None and norm and not trial["void"]:
            self._first = norm
        line = Text(f"{trial['trial']:>5}  {_number(norm):>10}  {_number(best):>10}  ")
        line.append(f"{_bar(norm, self._first):<{BAR_WIDTH}}", style="cyan")
        word = "void" if trial["void"] else trial["verdict"]
        line.append(f"  {word}", style="green" if word == "pass" else "bold yellow")
        return line

    def footer(self) -> Text:
        status = self._status
        if not status:
            return Text("  starting the mock rig and the daemon", style="dim")
        left = status.get("remaining_s")
        left_text = "" if left is None else f", about {left:.0f} s left"
        learning = "learning" if status["learning"] else f"frozen by {status['frozen_by']}"
        where = f"trial {status['trial']} of {status['trials_total']}, {learning}"
        if status["purpose"] == "floor":
            where, left_text = f"trial {status['trial']}, repeated to measure the floor", ""
        return Text(f"  {where}, {status['state']}, {status['voids']} void{left_text}", style="dim")


def summary_table(result: Summary) -> Table:
    table = Table(show_header=False, box=None, padding=(0, 2), title_justify="left")
    rows = {
        "plant, link": f"{result.plant}, {result.link}",
        "trials": f"{result.trials} ({result.voids} void, {result.late_updates} late updates)",
        "error norm, first": _number(result.first_norm),
        "error norm, last": f"{_number(result.last_norm)} (median of the repeats at the end)",
        "reduction": "-" if result.reduction is None else f"{result.reduction:.3g} times",
        "repeatability floor": _number(result.floor),
        "verdicts": ", ".join(f"{k} x{n}" for k, n in result.verdicts.items()) or "all pass",
        "the run": result.over or "was ended",
        "record": result.record,
    }
    table.add_column(style="dim")
    table.add_column(overflow="fold")
    for name, value in rows.items():
        table.add_row(name, value)
    return table


def verdict_line(result: Summary) -> Text:
    if result.last_norm is None or not result.floor:
        return Text("The run ended before the repeatability floor was measured.", style="bold red")
    times = result.last_norm / result.floor
    if result.reached:
        text = f"Reached: the last error is {times:.2f} times the repeatability floor."
        return Text(text, style="bold green")
    return Text(
        f"Not reached: the last error is {times:.2f} times the repeatability floor, "
        f"expected at most {FLOORS:g}.",
        style="bold red",
    )


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.4g}"


def _bar(norm: float | None, first: float | None) -> str:
    """Logarithmic: full at the first error, empty three decades below."""
    if not norm or not first:
        return ""
    share = 1 + math.log10(norm / first) / DECADES
    eighths = round(min(max(share, 0.02), 1.0) * BAR_WIDTH * 8)
    return "█" * (eighths // 8) + BLOCKS[eighths % 8].strip()
