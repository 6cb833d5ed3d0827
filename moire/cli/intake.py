"""``moire intake``: triage of a folder, resumable."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Any

import click

from moire.cli.options import VERDICTS, shared

if TYPE_CHECKING:
    from moire.ledger import Ledger


@click.command("intake")
@click.argument("folder", type=click.Path())
@click.option(
    "--ledger", type=click.Path(dir_okay=False), default="intake.sqlite", show_default=True,
    metavar="FILE.sqlite", help="What is done is kept here; a second run goes on.",
)  # fmt: skip
@click.option(
    "--jobs",
    type=click.IntRange(1, 512),
    help="Processes on this machine; one for each processor if not given.",
)
@click.option("--csv", type=click.Path(dir_okay=False), metavar="FILE", help="Write a table.")
@click.option(
    "--jsonl", type=click.Path(dir_okay=False), metavar="FILE", help="Write one JSON line per file."
)
@click.option(
    "--report",
    type=click.Path(file_okay=False),
    metavar="DIR",
    help="Write a contact sheet and every scan's report.",
)
@click.option(
    "--time-limit", type=click.FloatRange(1), default=600.0, show_default=True, metavar="SECONDS",
    help="Give up one file after this.",
)  # fmt: skip
@click.option("--retry", is_flag=True, help="Examine files again that failed before.")
@shared("ppi", "viewing")
@click.option(
    "--fail-on", type=click.Choice(VERDICTS), multiple=True, help="Exit with code 10 on this verdict."
)
@shared("json", "quiet")
def command(folder: str, **flags: Any) -> int:
    """Examine every scan below FOLDER and sort out what must be done again.

    \b
    Example:
      moire intake /scans/today --ledger today.sqlite --csv today.csv
      moire intake /scans/today --ledger today.sqlite --jobs 8 --fail-on rescan
    """
    from moire.cli.console import console, print_json
    from moire.cli.main import EXIT_PARTIAL, EXIT_VERDICT
    from moire.cli.tally import Progress, show_batch, summary
    from moire.errors import ScanUnreadable
    from moire.ledger import Ledger
    from moire.scanfile import check_target

    if not os.path.isdir(folder):
        raise ScanUnreadable(folder, "is not a folder: give the folder that holds the scans")
    for target in (flags["csv"], flags["jsonl"]):
        if target:
            check_target(target, force=True, inputs=(flags["ledger"],))
    if flags["report"]:
        _make_folder(flags["report"])
    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    with Ledger(flags["ledger"]) as ledger:
        run = ledger.begin(os.path.abspath(folder), at=_now())
        with Progress(quiet=flags["quiet"]) as progress:
            try:
                _examine(folder, ledger, run, progress, flags)
            except KeyboardInterrupt:
                progress.stop()
                out.print(f"Stopped. What is done is kept in {flags['ledger']}: the same command goes on.")
                return 130
        _export(folder, ledger, run, flags)
        show_batch(out, ledger, run)
        if flags["report"]:
            out.print(f"Contact sheet: {os.path.join(flags['report'], 'index.html')}")
        if flags["as_json"]:
            print_json(summary(ledger, run, os.path.abspath(folder)))
        if any(verdict in flags["fail_on"] for _, verdict in ledger.tally(run)):
            return EXIT_VERDICT
        return EXIT_PARTIAL if ledger.failures(run) else 0


def _now() -> str:
    import datetime

    return datetime.datetime.now().astimezone().isoformat(timespec="seconds")


def _examine(folder: str, ledger: Ledger, run: int, progress: Any, flags: dict[str, Any]) -> None:
    from functools import partial

    from moire.contact import has_pictures
    from moire.crew import processes
    from moire.intake import find_scans, take_in
    from moire.outcome import Terms

    jobs = flags["jobs"] or os.cpu_count() or 1
    terms = Terms(ppi=flags["ppi"], viewing=flags["viewing"])
    sheet = flags["report"] or ""
    leave = [sheet] if sheet else []
    if progress.shown:
        progress.expect(sum(1 for _ in find_scans(folder, leave=leave)))
    taken = take_in(
        find_scans(folder, leave=leave),
        ledger=ledger,
        run=run,
        executor=partial(processes, jobs),
        terms=lambda _: terms,
        on_known=lambda known: progress.count(known.verdict),
        retry=flags["retry"],
        wanted=lambda known: bool(sheet) and not known.error and not has_pictures(sheet, known.content),
        ahead=2 * jobs,
        limit_s=flags["time_limit"],
        sheet=sheet,
    )
    for outcome in taken:
        progress.count(outcome.verdict)


def _make_folder(path: str) -> None:
    from moire.errors import OutputRefused

    try:
        os.makedirs(path, exist_ok=True)
    except OSError as error:
        raise OutputRefused(path, f"cannot be made a folder ({error.strerror}): give another name") from error


def _export(folder: str, ledger: Ledger, run: int, flags: dict[str, Any]) -> None:
    from moire.intake import write_csv, write_jsonl

    if flags["csv"]:
        write_csv(ledger.outcomes(run), flags["csv"])
    if flags["jsonl"]:
        write_jsonl(ledger.outcomes(run), flags["jsonl"])
    if flags["report"]:
        from moire.outcome import path_text
        from moire.sheet import render_sheet, write_sheet

        sheet = flags["report"]
        page = render_sheet(ledger.outcomes(run), folder=path_text(folder), sheet=sheet, made_at=_now())
        write_sheet(page, sheet)
