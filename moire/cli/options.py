"""Flags shared by commands.

==============  ===========================================================
``--json``      one JSON document on stdout; human text goes to stderr
``--quiet``     no human text and no progress
``--ppi``       the scan's sampling rate, N or XxY; wins over the file's own
``--viewing``   condition under which visibility is judged
``--warp``      which threads of a cloth are its ends
``--page``      page of a multi-page file, from 1
``--report``    write a self-contained HTML report
``--force``     overwrite an output; never an input
==============  ===========================================================
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import click

KINDS = (
    "halftone", "alias", "rosette", "weave", "banding", "block-grid", "laid-lines", "stochastic",
    "display-grid", "content", "unexplained",
)  # fmt: skip
VERDICTS = ("sound", "mendable", "rescan", "refer", "unreadable")


class PpiType(click.ParamType[tuple[float, float]]):
    """``300`` or ``300x600``: pixels per inch along x and y."""

    name = "ppi"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[float, float]:
        if isinstance(value, tuple):
            return value
        parts = str(value).lower().split("x")
        try:
            rates = [float(p) for p in parts]
        except ValueError:
            rates = []
        if len(rates) not in (1, 2) or not all(10 <= r <= 20000 for r in rates):
            self.fail(
                f"{value!r} is not a sampling rate: give N or XxY in pixels per inch, 10 to 20000", param, ctx
            )
        return (rates[0], rates[-1])


def shared(*names: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Decorator that adds the named shared flags to a command, in the order given."""

    def decorate(command: Callable[..., Any]) -> Callable[..., Any]:
        for name in reversed(names):
            command = _FLAGS[name](command)
        return command

    return decorate


_FLAGS: dict[str, Callable[[Callable[..., Any]], Callable[..., Any]]] = {
    "json": click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout."),
    "quiet": click.option("--quiet", is_flag=True, help="No human text and no progress."),
    "ppi": click.option(
        "--ppi", type=PpiType(), metavar="N|XxY", help="Sampling rate of the scan; wins over the file's own."
    ),
    "viewing": click.option(
        "--viewing",
        type=click.Choice(["monitor", "print"]),
        default="monitor",
        show_default=True,
        help="Judge visibility with pixels 1:1 on a monitor, or at the original's size in the hand.",
    ),
    "warp": click.option(
        "--warp",
        type=click.Choice(["vertical", "horizontal"]),
        default="vertical",
        show_default=True,
        help="How the warp of a cloth runs on the page; a picture cannot tell.",
    ),
    "page": click.option(
        "--page", type=click.IntRange(1), default=1, show_default=True, help="Page of the file."
    ),
    "report": click.option(
        "--report",
        type=click.Path(dir_okay=False),
        metavar="FILE.html",
        help="Write a self-contained report.",
    ),
    "force": click.option("--force", is_flag=True, help="Overwrite outputs; the input never."),
}
