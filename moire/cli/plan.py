"""``moire plan``: the rate, turn or derivative size that shows no beat."""

from __future__ import annotations

import math
import re
from typing import Any

import click

from moire.cli.options import VERDICTS, PpiType, shared

_SCREEN = re.compile(r"^(?P<lpi>[\d.]+)@(?P<angle>-?[\d.]+)(?::(?P<ink>[a-z]+))?$")
_SHAPES = ("round", "disc", "oval", "ellipse", "diamond", "square", "line")
_KERNELS = (
    "opencv-nearest", "opencv-area", "opencv-linear", "opencv-cubic", "opencv-lanczos4", "pillow-nearest",
    "pillow-box", "pillow-bilinear", "pillow-hamming", "pillow-bicubic", "pillow-lanczos",
)  # fmt: skip
_INK_ORDER = {1: ("black",), 3: ("cyan", "magenta", "yellow"), 4: ("cyan", "magenta", "yellow", "black")}
_MOST = 1000


class RatesType(click.ParamType[tuple[tuple[float, float], ...]]):
    """``200,300,400x600`` or ``150-1200``: rates to choose from, listed or a range."""

    name = "rates"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[tuple[float, float], ...]:
        if isinstance(value, tuple):
            return value
        spread = _range(str(value))
        if spread is not None:
            low, high = spread
            if not 10 <= low < high <= 20000:
                self.fail(f"{value!r}: give a range A-B in pixels per inch, 10 to 20000", param, ctx)
            step = max(1, math.ceil((high - low + 1) / _MOST))
            return tuple((low + step * i,) * 2 for i in range(int((high - low) // step) + 1))
        one = PpiType()
        return tuple(one.convert(part, param, ctx) for part in str(value).split(","))


class TurnsType(click.ParamType[tuple[float, ...]]):
    """``0,5,7.5`` or ``0-10``: degrees, listed or every half degree of a range."""

    name = "turns"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[float, ...]:
        if isinstance(value, tuple):
            return value
        spread = _range(str(value))
        try:
            if spread is None:
                turns = [float(part) for part in str(value).split(",")]
            else:
                turns = [spread[0] + i / 2 for i in range(int(2 * (spread[1] - spread[0])) + 1)]
        except ValueError:
            turns = []
        if not turns or not all(abs(t) <= 180 for t in turns) or len(turns) > 200:
            self.fail(f"{value!r}: give degrees as A,B,.. or a range A-B", param, ctx)
        return tuple(turns)


def _range(text: str) -> tuple[float, float] | None:
    match = re.match(r"^([\d.]+)-([\d.]+)$", text.strip())
    return (float(match[1]), float(match[2])) if match else None


@click.command("plan")
@click.option("--ruling", metavar="LPI", help="Ruling of the screens, lines per inch; needs --angles.")
@click.option(
    "--angles", metavar="A,B,..", help="Their angles: one black, or cyan, magenta, yellow[, black]."
)
@click.option(
    "--screen", "screens", multiple=True, metavar="LPI@ANGLE:INK", help="One screen by name; repeat."
)
@click.option("--spot", type=click.Choice(_SHAPES), default="round", show_default=True, help="Dot shape.")
@click.option("--ends", type=click.FloatRange(1, 200), help="Cloth: warp threads per cm; needs --picks.")
@click.option("--picks", type=click.FloatRange(1, 200), help="Cloth: weft threads per cm.")
@click.option("--weave", default="plain", show_default=True, metavar="WEAVE",
              help="Cloth: how it is bound, such as plain, basket2/2, twill3/1S, satin8/3.")  # fmt: skip
@click.option("--from", "scan", type=click.Path(), metavar="SCAN", help="Measure the original in a scan.")
@click.option("--from-ppi", type=PpiType(), metavar="N|XxY", help="That scan's rate; wins over its own.")
@click.option("--second", type=click.Path(), metavar="SCAN", help="Another scan of it: settles folds.")
@click.option("--second-ppi", type=PpiType(), metavar="N|XxY", help="The second scan's rate.")
@click.option("--ppi", type=RatesType(), metavar="N,XxY,..|A-B", help="Rates that the scanner offers.")
@click.option(
    "--turn", type=TurnsType(), default="0", show_default=True, metavar="DEG,..|A-B",
    help="Degrees that the sheet may lie turned, ccw.",
)  # fmt: skip
@click.option(
    "--optical", type=PpiType(), metavar="N|XxY", help="The sensor's own rate, if --ppi is made from it."
)
@click.option("--lens", type=click.FloatRange(0, 5), default=0.35, show_default=True,
              help="Blur sigma, pixels of the sensor.")  # fmt: skip
@click.option(
    "--derivative-ppi",
    type=RatesType(),
    metavar="N,..|A-B",
    help="Choose a reduction of a master at --ppi instead.",
)
@click.option("--kernel", type=click.Choice(_KERNELS), default="opencv-area", show_default=True,
              metavar="KERNEL",
              help="What resamples: opencv-area, pillow-lanczos and others (docs/commands.md).")  # fmt: skip
@click.option("--reprint", metavar="LPI@ANGLE", help="The scan will be printed through this screen.")
@shared("viewing")
@click.option(
    "--chart", type=click.Path(dir_okay=False), metavar="FILE.svg", help="Draw visibility against ppi."
)
@click.option(
    "--fail-on", type=click.Choice(VERDICTS), multiple=True, help="Exit with 10 if the best choice is that."
)
@shared("force", "json", "quiet")
def command(**flags: Any) -> int:
    """Which ppi, turn or derivative size is free of visible beats, and why.

    \b
    Example:
      moire plan --ruling 133 --angles 15,75,0,45 --ppi 300,400,600,1200
      moire plan --ends 18 --picks 16 --ppi 100-600 --chart cloth.svg
      moire plan --from leaf.tif --ppi 600 --derivative-ppi 100,150,200 \\
          --kernel pillow-lanczos --reprint 150@45
    """
    from moire.cli.console import console, print_json
    from moire.cli.main import EXIT_VERDICT
    from moire.cli.plantable import show_plan
    from moire.plan import Scanning, plan
    from moire.sampling import Optics

    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    inputs = [path for path in (flags["scan"], flags["second"]) if path]
    if flags["chart"]:
        from moire.scanfile import check_target

        check_target(flags["chart"], force=flags["force"], inputs=inputs)
    source, own_rate = _source(flags)
    rates, master = _rates(flags, own_rate)
    scanning = Scanning(
        optics=Optics(lens_px=flags["lens"]), optical=flags["optical"], master=master, kernel=flags["kernel"]
    )
    made = plan(
        source, rates=rates, turns=flags["turn"], scanning=scanning, reprint=_reprint(flags["reprint"]),
        viewing=flags["viewing"], shape=flags["spot"],
    )  # fmt: skip
    show_plan(out, made)
    if flags["chart"]:
        from moire.chart import draw_chart
        from moire.scanfile import write_bytes

        svg = draw_chart(made, source, rates=rates, scanning=scanning, shape=flags["spot"])
        write_bytes(svg.encode(), flags["chart"], force=flags["force"], inputs=inputs)
        out.print(f"Chart: {flags['chart']}")
    if flags["as_json"]:
        print_json(made)
    verdict = None if made.recommended is None else made.choices[made.recommended].verdict
    return EXIT_VERDICT if verdict in flags["fail_on"] else 0


def _source(flags: dict[str, Any]) -> tuple[Any, tuple[float, float] | None]:
    """Screens, cloth or an examination, and the rate of the scan where there is one."""
    ways = {
        "--ruling": flags["ruling"], "--screen": flags["screens"], "--ends and --picks": flags["ends"],
        "--from": flags["scan"],
    }  # fmt: skip
    given = [way for way, value in ways.items() if value]
    if len(given) != 1:
        raise click.UsageError(f"Say what the original is, in one way of: {', '.join(ways)}.")
    if flags["scan"]:
        return _measured(flags)
    if flags["ends"] or flags["picks"]:
        if not (flags["ends"] and flags["picks"]):
            raise click.UsageError("Cloth needs both --ends and --picks, threads per cm.")
        return _weave(flags), None
    if flags["screens"]:
        return tuple(_named_screen(text) for text in flags["screens"]), None
    if not flags["angles"]:
        raise click.UsageError("A ruling needs the angles of its screens: give --angles, or repeat --screen.")
    return _ruled(flags["ruling"], flags["angles"]), None


def _measured(flags: dict[str, Any]) -> tuple[Any, tuple[float, float] | None]:
    from moire.examine import examine
    from moire.scanfile import read

    scan = read(flags["scan"], ppi=flags["from_ppi"])
    second = None if flags["second"] is None else read(flags["second"], ppi=flags["second_ppi"])
    return examine(scan, viewing=flags["viewing"], second=second), scan.ppi


def _weave(flags: dict[str, Any]) -> Any:
    from moire.bindings import parse_binding
    from moire.model import Weave
    from moire.units import lpcm_to_lpi

    try:
        binding = parse_binding(flags["weave"])
    except ValueError as error:
        raise click.BadParameter(str(error), param_hint="--weave") from error
    ends, picks = flags["ends"], flags["picks"]
    return Weave(
        ends_per_cm=ends, picks_per_cm=picks, sigma_per_cm=0.0, ends_per_inch=lpcm_to_lpi(ends),
        picks_per_inch=lpcm_to_lpi(picks), pattern=binding.pattern, skew_deg=0.0,
        structure=binding.structure,
    )  # fmt: skip


def _ruled(ruling: str, angles: str) -> tuple[Any, ...]:
    try:
        lpi, turned = float(ruling), [float(a) for a in angles.split(",")]
    except ValueError:
        raise click.UsageError(
            f"--ruling {ruling} --angles {angles}: give a number of lines per inch and angles as A,B,.."
        ) from None
    inks = _INK_ORDER.get(len(turned), ("unknown",) * len(turned))
    return tuple(_screen(lpi, angle, ink) for angle, ink in zip(turned, inks, strict=True))


def _named_screen(text: str) -> Any:
    from moire.press import INKS

    match = _SCREEN.match(text)
    if not match or match["ink"] not in INKS:
        raise click.BadParameter(
            f"{text!r}: write LPI@ANGLE:INK with one of {', '.join(INKS)}", param_hint="--screen"
        )
    return _screen(float(match["lpi"]), float(match["angle"]), match["ink"])


def _screen(lpi: float, angle: float, ink: Any) -> Any:
    from moire.model import Screen
    from moire.units import lpi_to_lpcm

    return Screen(
        ruling_lpi=lpi, ruling_lpi_sigma=0.0, ruling_lpcm=lpi_to_lpcm(lpi), angle_deg=angle,
        angle_deg_sigma=0.0, ink=ink, shape="dot",
    )  # fmt: skip


def _rates(flags: dict[str, Any], own: tuple[float, float] | None) -> tuple[Any, tuple[float, float] | None]:
    """Rates to choose from, and the master's where they are of derivatives."""
    rates = flags["ppi"]
    if flags["derivative_ppi"] is None:
        if rates is None:
            raise click.UsageError("Say which rates the scanner offers: --ppi 300,400,600 or --ppi 150-1200.")
        return rates, None
    if rates is None and own is None:
        raise click.UsageError("A derivative has a master: give its rate with --ppi.")
    if rates is not None and len(rates) != 1:
        raise click.UsageError("A derivative has one master: give one rate with --ppi.")
    return flags["derivative_ppi"], own if rates is None else rates[0]


def _reprint(text: str | None) -> tuple[float, float] | None:
    if text is None:
        return None
    match = _SCREEN.match(text)
    if not match or match["ink"] or not 10 <= float(match["lpi"]) <= 1000:
        raise click.BadParameter(
            f"{text!r}: write LPI@ANGLE, 10 to 1000 lines per inch", param_hint="--reprint"
        )
    return float(match["lpi"]), float(match["angle"])
