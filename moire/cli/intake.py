"""``moire intake``: triage of a folder, resumable."""

from __future__ import annotations

import os
from typing import Any

import click

from moire.cli.options import VERDICTS, shared


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
@click.option("--cluster", metavar="ADDRESS", help="Run on a dask.distributed scheduler instead.")
@click.option("--watch", is_flag=True, help="Go on taking files as they are fully written, until Ctrl-C.")
@click.option(
    "--profile", type=click.Path(dir_okay=False), metavar="FILE.toml", help="Scanner, materials, limits."
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
      moire intake /scans/inbox --watch --profile bureau.toml --report sheet
    """
    from moire.cli.console import console, print_json
    from moire.cli.main import EXIT_PARTIAL, EXIT_VERDICT
    from moire.cli.shift import Shift
    from moire.cli.tally import SHOWN, Progress, show_batch
    from moire.ledger import Ledger
    from moire.profile import Profile, read_profile

    _check(folder, flags)
    profile = read_profile(flags["profile"]) if flags["profile"] else Profile()
    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    with Ledger(flags["ledger"]) as ledger:
        shift = Shift(folder, ledger, profile, flags, out)
        with Progress(quiet=flags["quiet"]) as progress:
            try:
                (shift.watch if flags["watch"] else shift.examine)(progress)
            except KeyboardInterrupt:
                progress.stop()
                # Watching ends no other way; anything else is cut short.
                if not flags["watch"]:
                    out.print(
                        f"Stopped. What is done is kept in {flags['ledger']}: the same command goes on."
                    )
                    return 130
        batch = shift.export()
        show_batch(out, batch, ledger.worst(shift.run, SHOWN))
        if flags["report"]:
            out.print(f"Contact sheet: {os.path.join(flags['report'], 'index.html')}")
        if flags["as_json"]:
            print_json(batch)
        if shift.stopped():
            return EXIT_VERDICT
        return EXIT_PARTIAL if batch.failed else 0


def _check(folder: str, flags: dict[str, Any]) -> None:
    """Refuse what cannot work before any file is examined."""
    from moire.errors import OutputRefused, ScanUnreadable
    from moire.intake import SUFFIXES
    from moire.scanfile import check_target
    from moire.sheet import check_sheet

    if not os.path.isdir(folder):
        raise ScanUnreadable(folder, "is not a folder: give the folder that holds the scans")
    if flags["jobs"] and flags["cluster"]:
        raise click.UsageError("--jobs is for this machine, --cluster for another engine: give one of them")
    inputs = [flags["ledger"], *([flags["profile"]] if flags["profile"] else [])]
    for target in (flags["csv"], flags["jsonl"]):
        if target:
            check_target(target, force=True, inputs=inputs)
            if os.path.splitext(target)[1].lower() in SUFFIXES:
                raise OutputRefused(target, "is named like a scan: give a name that ends in .csv or .jsonl")
    if flags["report"]:
        check_sheet(flags["report"], folder)
        try:
            os.makedirs(flags["report"], exist_ok=True)
        except OSError as error:
            reason = f"cannot be made a folder ({error.strerror}): give another name"
            raise OutputRefused(flags["report"], reason) from error
