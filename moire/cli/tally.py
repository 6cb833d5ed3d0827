"""A batch as text: progress with counts per verdict, and at the end a table, worst first."""

from __future__ import annotations

import sys
from collections import Counter
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.console import Console

    from moire.cli.shift import Insight
    from moire.ledger import Ledger
    from moire.outcome import Outcome

_ORDER = ("unreadable", "rescan", "refer", "mendable", "sound")
_SHOWN = 20
_NOTES = 8


class Progress:
    """A bar on the terminal with rate, time left and counts; silent elsewhere."""

    def __init__(self, *, quiet: bool) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as Bar

        terminal = Console(file=sys.stderr)
        self.quiet = quiet
        self.shown = terminal.is_terminal and not quiet
        self.counts: Counter[str] = Counter()
        self._bar = Bar(
            BarColumn(bar_width=16),
            MofNCompleteColumn(),
            TextColumn("{task.fields[rate]}"),
            TimeRemainingColumn(compact=True),
            TextColumn("{task.fields[counts]}"),
            console=terminal,
            transient=True,
            disable=not self.shown,
        )
        self._task = self._bar.add_task("", total=None, rate="", counts="")

    def __enter__(self) -> Progress:
        self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._bar.stop()

    def stop(self) -> None:
        """Leave the terminal as it was."""
        self._bar.stop()

    def say(self, text: str) -> None:
        """A line above the bar."""
        if not self.quiet:
            self._bar.console.print(text, markup=False)

    def expect(self, total: int) -> None:
        """Say how many files there are."""
        self._bar.update(self._task, total=total)

    def count(self, verdict: str) -> None:
        """One more file is done."""
        self.counts[verdict] += 1
        if self.shown:
            speed = self._bar.tasks[0].speed
            self._bar.update(
                self._task,
                advance=1,
                rate="" if not speed else f"{60 * speed:.0f}/min",
                counts=", ".join(f"{self.counts[v]} {v}" for v in _ORDER if self.counts[v]),
            )


def show_batch(out: Console, ledger: Ledger, run: int) -> None:
    """Counts, and the worst files first."""
    from rich import box
    from rich.markup import escape
    from rich.table import Table

    counts = _counts(ledger, run)
    total = sum(counts.values())
    said = ", ".join(f"{n} {v}" for v, n in counts.items() if n)
    out.print(f"[bold]{total} file{'' if total == 1 else 's'}[/bold]: {said or 'nothing to examine'}.")
    worst = [o for o in ledger.worst(run, _SHOWN) if o.verdict != "sound"]
    if not worst:
        return
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1))
    table.add_column("verdict")
    table.add_column("file", overflow="ellipsis", no_wrap=True, max_width=30)
    table.add_column("visible", justify="right")
    table.add_column("what", overflow="fold")
    for outcome in worst:
        seen = f"{outcome.visibility:.1f}" if outcome.visibility else ""
        table.add_row(outcome.verdict, escape(outcome.file), seen, escape(_what(outcome)))
    out.print(table)
    rest = total - counts["sound"] - len(worst)
    if rest > 0:
        out.print(f"and {rest} more: see --csv, --jsonl or --report.")


def show_notes(out: Console, notes: list[str]) -> None:
    """What the batch shows as a whole, the first few sentences."""
    from rich.markup import escape

    for note in notes[:_NOTES]:
        out.print(escape(note))
    if len(notes) > _NOTES:
        out.print(f"and {len(notes) - _NOTES} more such notes: see --json or --report.")


def summary(ledger: Ledger, run: int, folder: str, insight: Insight) -> dict[str, Any]:
    """The batch as one JSON document."""
    failures = [{"path": o.path, "error": o.error} for o in ledger.outcomes(run) if o.error]
    counts = _counts(ledger, run)
    return {
        "format": "moire.intake",
        "version": 1,
        "folder": folder,
        "files": sum(counts.values()),
        "verdicts": counts,
        "failed": failures,
        "volumes": insight.volumes,
        "trends": insight.trends,
    }


def _counts(ledger: Ledger, run: int) -> dict[str, int]:
    counts = dict.fromkeys(_ORDER, 0)
    for (_, verdict), number in ledger.tally(run).items():
        counts[verdict] += number
    return counts


def _what(outcome: Outcome) -> str:
    if outcome.error:
        return outcome.error
    for finding in outcome.findings:
        if finding.screen is not None:
            s = finding.screen
            return f"{finding.kind} {s.ruling_lpi:.1f} lpi ({s.ruling_lpcm:.1f}/cm), {s.ink}"
    return ", ".join(dict.fromkeys(f.kind for f in outcome.findings))
