"""A batch as text: progress with counts per verdict, and at the end a table, worst first."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from moire.batch import Batch
    from moire.outcome import Outcome

_ORDER = ("unreadable", "rescan", "refer", "mendable", "sound")
SHOWN = 20
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


def show_batch(out: Console, batch: Batch, worst: Sequence[Outcome]) -> None:
    """Counts, the worst files first, and what the batch shows as a whole."""
    from rich.markup import escape

    said = ", ".join(f"{number} {verdict}" for verdict, number in batch.verdicts.items() if number)
    files = f"{batch.files} file{'' if batch.files == 1 else 's'}"
    out.print(f"[bold]{files}[/bold]: {said or 'nothing to examine'}.")
    shown = [o for o in worst if o.verdict != "sound"]
    if shown:
        out.print(_worst_table(shown))
    rest = batch.files - batch.verdicts["sound"] - len(shown)
    if rest > 0:
        out.print(f"and {rest} more: see --csv, --jsonl or --report.")
    notes = batch.notes()
    for note in notes[:_NOTES]:
        out.print(escape(note))
    if len(notes) > _NOTES:
        out.print(f"and {len(notes) - _NOTES} more such notes: see --json or --report.")


def _worst_table(worst: Sequence[Outcome]) -> Table:
    from rich import box
    from rich.markup import escape
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1))
    table.add_column("verdict")
    table.add_column("file", overflow="ellipsis", no_wrap=True, max_width=30)
    table.add_column("visible", justify="right")
    table.add_column("what", overflow="fold")
    for outcome in worst:
        seen = f"{outcome.visibility:.1f}" if outcome.visibility else ""
        table.add_row(outcome.verdict, escape(outcome.file), seen, escape(_what(outcome)))
    return table


def _what(outcome: Outcome) -> str:
    if outcome.error:
        return outcome.error
    for finding in outcome.findings:
        if finding.screen is not None:
            s = finding.screen
            return f"{finding.kind} {s.ruling_lpi:.1f} lpi ({s.ruling_lpcm:.1f}/cm), {s.ink}"
    return ", ".join(dict.fromkeys(f.kind for f in outcome.findings))
