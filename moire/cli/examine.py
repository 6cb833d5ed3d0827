"""``moire examine``: find and explain every periodic pattern in one scan."""

from __future__ import annotations

from typing import Any

import click

from moire.cli.options import VERDICTS, PpiType, shared


@click.command("examine")
@click.argument("scan", type=click.Path())
@shared("ppi", "viewing", "page", "warp")
@click.option(
    "--second",
    type=click.Path(),
    help="Another scan of the same original, at another ppi or turned by a few degrees: settles folds.",
)
@click.option("--second-ppi", type=PpiType(), metavar="N|XxY", help="Sampling rate of the second scan.")
@click.option(
    "--fail-on", type=click.Choice(VERDICTS), multiple=True, help="Exit with code 10 on this verdict."
)
@shared("report", "force", "json", "quiet")
def command(scan: str, **flags: Any) -> int:
    """Find and explain every periodic pattern in SCAN.

    \b
    Example:
      moire examine postcard.tif --ppi 600
      moire examine page.png --json --fail-on rescan > page.json
      moire examine leaf-300.tif --second leaf-400.tif
      moire examine swatch.tif --warp horizontal
    """
    from moire.cli.console import console, print_json, show_examination
    from moire.cli.main import EXIT_VERDICT
    from moire.errors import BadRequest
    from moire.examine import examine
    from moire.scanfile import read

    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    master = read(scan, ppi=flags["ppi"], page=flags["page"])
    second = None if flags["second"] is None else read(flags["second"], ppi=flags["second_ppi"])
    if second is not None and (second.ppi is None or master.ppi is None):
        raise BadRequest(
            "--second needs the ppi of both scans: give --ppi, or a second scan that states its own."
        )
    found = examine(master, viewing=flags["viewing"], second=second, warp=flags["warp"])
    if flags["report"]:
        from moire.cli.reporting import save_report

        save_report(
            flags["report"], master=master, before=found, mending=None, inputs=(scan,), force=flags["force"]
        )
    show_examination(out, found)
    if flags["report"]:
        out.print(f"Report: {flags['report']}")
    if flags["as_json"]:
        print_json(found)
    return EXIT_VERDICT if found.verdict in flags["fail_on"] else 0
