"""One shift over a folder: what the flags of ``moire intake`` ask for, done."""

from __future__ import annotations

import datetime
import os
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from functools import partial
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.console import Console

    from moire.batch import Batch
    from moire.cli.tally import Progress
    from moire.ledger import Ledger
    from moire.outcome import Outcome, Terms
    from moire.profile import Profile


class Shift:
    """A folder, a ledger and a run in it, under the flags of the command."""

    def __init__(self, folder: str, ledger: Ledger, profile: Profile, flags: dict[str, Any], out: Console):
        self.folder, self.ledger, self.profile, self.flags, self.out = folder, ledger, profile, flags, out
        self.sheet: str = flags["report"] or ""
        self.run = ledger.begin(os.path.abspath(folder), at=now())

    def examine(self, progress: Progress) -> None:
        """Examine the folder as it is."""
        if progress.shown:
            progress.expect(sum(1 for _ in self._find()))
        with self._executor() as (executor, ahead):
            for outcome in self._take_in(self._find(), progress, executor, ahead):
                progress.count(outcome.verdict)

    def watch(self, progress: Progress) -> None:
        """Examine files as they settle in the folder, until Ctrl-C or a verdict that stops the line."""
        from moire.callout import call_out
        from moire.watch import settled

        with self._executor() as (executor, ahead):
            for ready in settled(self._find):
                if not ready:
                    continue
                for outcome in self._take_in(ready, progress, executor, ahead):
                    progress.count(outcome.verdict)
                    command = self.profile.on.get(outcome.verdict)
                    trouble = call_out(command, outcome) if command else ""
                    if trouble:
                        progress.say(f"{outcome.file}: {trouble}")
                self.export()
                if self.stopped():
                    return

    def batch(self) -> Batch:
        """What became of the folder by now."""
        import moire
        from moire.batch import Batch, Failure
        from moire.outcome import SEVERITY, path_text
        from moire.trend import find_trends
        from moire.volume import find_volumes

        counts = dict.fromkeys(SEVERITY, 0)
        for (_, verdict), number in self.ledger.tally(self.run).items():
            counts[verdict] += number
        return Batch(
            software=f"moire {moire.__version__}",
            folder=path_text(self.folder),
            files=sum(counts.values()),
            verdicts=counts,
            failed=tuple(Failure(path=p, error=e) for p, e in self.ledger.failures(self.run)),
            volumes=tuple(find_volumes(self.ledger.outcomes(self.run))),
            trends=find_trends(self.ledger.with_banding()),
        )

    def export(self) -> Batch:
        """Write what the flags ask for, each whole or not at all."""
        from moire.intake import write_csv, write_jsonl

        batch = self.batch()

        if self.flags["csv"]:
            write_csv(self.ledger.outcomes(self.run), self.flags["csv"])
        if self.flags["jsonl"]:
            write_jsonl(self.ledger.outcomes(self.run), self.flags["jsonl"])
        if self.sheet:
            from moire.sheet import render_sheet, write_recipes, write_sheet

            notes = [*batch.notes(), *write_recipes(batch.volumes, self.sheet)]
            page = render_sheet(
                self.ledger.outcomes(self.run),
                folder=batch.folder,
                sheet=self.sheet,
                notes=notes,
                made_at=now(),
            )
            write_sheet(page, self.sheet)
        return batch

    def stopped(self) -> bool:
        """Whether a verdict occurred that the command line or the profile names."""
        return any(
            verdict in self.flags["fail_on"] or self.profile.stops(material, verdict)
            for material, verdict in self.ledger.tally(self.run)
        )

    def _find(self) -> Iterator[str]:
        from moire.intake import find_scans

        return find_scans(self.folder, leave=[self.sheet] if self.sheet else [])

    def _terms(self, path: str) -> Terms:
        from moire.outcome import Terms

        given = Terms(ppi=self.flags["ppi"], viewing=self.flags["viewing"])
        return self.profile.terms_of(os.path.relpath(path, self.folder).replace(os.sep, "/"), given=given)

    def _take_in(
        self, paths: Iterable[str], progress: Progress, executor: Any, ahead: int
    ) -> Iterator[Outcome]:
        from moire.contact import has_pictures
        from moire.intake import take_in

        return take_in(
            paths,
            ledger=self.ledger,
            run=self.run,
            executor=executor,
            terms=self._terms,
            on_known=lambda known: progress.count(known.verdict),
            retry=self.flags["retry"],
            wanted=lambda known: (
                bool(self.sheet) and not known.error and not has_pictures(self.sheet, known.content)
            ),
            ahead=ahead,
            limit_s=self.flags["time_limit"],
            sheet=os.path.abspath(self.sheet) if self.sheet else "",
        )

    @contextmanager
    def _executor(self) -> Iterator[tuple[Any, int]]:
        from moire.crew import processes

        if self.flags["cluster"]:
            from moire.cluster import engine

            with engine(self.flags["cluster"]) as found:
                yield found
            return
        jobs = self.flags["jobs"] or os.cpu_count() or 1
        yield partial(processes, jobs), 2 * jobs


def now() -> str:
    """The time here, in ISO 8601 with the offset from UTC."""
    return datetime.datetime.now().astimezone().isoformat(timespec="seconds")
