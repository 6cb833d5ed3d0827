"""``moire mend``: remove what is artifact, keep what is picture, prove it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from moire.cli.options import KINDS, shared

if TYPE_CHECKING:
    from rich.console import Console


@click.command("mend")
@click.argument("scan", type=click.Path())
@click.option(
    "-o", "--output", required=True, type=click.Path(dir_okay=False), help="The derivative to write."
)
@click.option(
    "--only",
    type=click.Choice(KINDS),
    metavar="KIND",
    multiple=True,
    help="Remove this kind alone; repeatable.",
)
@click.option(
    "--keep", type=click.Choice(KINDS), metavar="KIND", multiple=True, help="Leave this kind; repeatable."
)
@click.option(
    "--strength", type=click.FloatRange(0, 1), default=1.0, show_default=True, help="Share removed."
)
@click.option("--quick", is_flag=True, help="Lattice null only: faster and softer.")
@click.option("--to-ppi", type=float, help="Also reduce the derivative to this sampling rate, without alias.")
@click.option("--recipe", type=click.Path(dir_okay=False), metavar="FILE.json", help="Repeat a saved recipe.")
@click.option("--save-recipe", type=click.Path(dir_okay=False), metavar="FILE.json", help="Save the recipe.")
@click.option(
    "--premis", type=click.Path(dir_okay=False), metavar="FILE.xml", help="Write a PREMIS 3 record of OUT."
)
@click.option(
    "--manifest",
    type=click.Path(dir_okay=False),
    metavar="FILE.txt",
    help="Add OUT to a bag's manifest (RFC 8493).",
)
@shared("ppi", "viewing", "page", "report", "force", "json", "quiet")
def command(scan: str, **flags: Any) -> int:
    """Remove what is artifact from a copy of SCAN; the master is never touched.

    \b
    Example:
      moire mend postcard.tif -o postcard-mended.tif --report postcard.html
      moire mend page.png -o page-150.png --to-ppi 150 --save-recipe leaf.json

    KIND is one of halftone, alias, rosette, weave, banding, block-grid,
    laid-lines, stochastic, display-grid, content, unexplained. Unasked, screens,
    their beats, banding and display grids are removed; cloth and content stay.
    """
    from moire.cli.console import console, print_json, show_examination, show_mending
    from moire.cli.reporting import check_report_path, save_premis, save_report
    from moire.examine import examine
    from moire.manifest import add_to_manifest, check_manifest
    from moire.mend import mend
    from moire.recipe import from_json, to_json
    from moire.scanfile import check_target, digest, read, write, write_bytes

    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    target, force, inputs = (
        flags["output"],
        flags["force"],
        [scan, *([flags["recipe"]] if flags["recipe"] else [])],
    )
    check_target(target, force=force, inputs=inputs)
    if flags["report"]:
        check_report_path(flags["report"], inputs=inputs, force=force)
    if flags["premis"]:
        check_target(flags["premis"], force=force, inputs=[*inputs, target])
        if Path(flags["premis"]).absolute() == Path(target).absolute():
            raise click.UsageError("--premis and --output name one file: give the record another name")
    if flags["manifest"]:
        check_manifest(flags["manifest"], target)
    saved = from_json(_read_bytes(flags["recipe"]), name=flags["recipe"]) if flags["recipe"] else None
    master = read(scan, ppi=flags["ppi"], page=flags["page"])
    before = examine(master, viewing=flags["viewing"])
    done = _with_progress(
        out,
        lambda progress: mend(
            master,
            before,
            only=flags["only"],
            keep=flags["keep"],
            strength=flags["strength"],
            quick=flags["quick"],
            to_ppi=flags["to_ppi"],
            recipe=saved,
            progress=progress,
        ),
    )
    write(done.scan, target, force=force, inputs=inputs)
    if flags["save_recipe"]:
        write_bytes(to_json(done.recipe), flags["save_recipe"], force=force, inputs=inputs)
    sha256 = digest(target)
    if flags["premis"]:
        save_premis(flags["premis"], done, master=scan, derivative=target, inputs=inputs, force=force)
    if flags["manifest"]:
        add_to_manifest(flags["manifest"], target)
    if flags["report"]:
        save_report(
            flags["report"],
            master=master,
            before=before,
            mending=done,
            inputs=(*inputs, target),
            force=force,
            derivative=(Path(target).name, sha256),
        )
    show_examination(out, before)
    show_mending(out, done, target)
    if flags["report"]:
        out.print(f"  Report: {flags['report']}")
    if flags["as_json"]:
        print_json(
            {
                "format": "moire.mending",
                "version": 1,
                "output": target,
                "output_sha256": sha256,
                "before": done.before,
                "after": done.after,
                "recipe": done.recipe,
                "measures": done.measures,
            }
        )
    return 0


def _read_bytes(path: str) -> bytes:
    from moire.errors import ScanUnreadable

    try:
        return Path(path).read_bytes()
    except OSError as error:
        raise ScanUnreadable(path, f"cannot be read as a recipe: {error.strerror}") from error


def _with_progress(out: Console, work: Any) -> Any:
    """Run `work(progress)` under a bar on the terminal; nothing is drawn elsewhere."""
    import sys

    from rich.console import Console
    from rich.progress import Progress

    err = Console(file=sys.stderr)
    if out.quiet or not err.is_terminal:
        return work(lambda _: None)
    with Progress(console=err, transient=True) as bar:
        task = bar.add_task("Mending", total=1.0)
        return work(lambda share: bar.update(task, completed=share))
