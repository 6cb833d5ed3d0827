"""``moire proof``: make a test scan with known truth."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import click

from moire.cli.options import PpiType, shared

_CLOTH = re.compile(r"^(?P<ends>[\d.]+)x(?P<picks>[\d.]+):(?P<weave>[a-zA-Z\d/]+)$")
_STRIPES = ((0.20, 0.26, 0.42), (0.72, 0.70, 0.64))
_SCREEN = re.compile(r"^(?P<lpi>[\d.]+)@(?P<angle>-?[\d.]+):(?P<ink>[a-z]+)$")


@click.command("proof")
@click.option(
    "-o", "--output", required=True, type=click.Path(dir_okay=False), help="The test scan to write."
)
@click.option(
    "--screen",
    "screens",
    multiple=True,
    metavar="LPI@ANGLE:INK",
    help="One ink's screen; repeat for each ink.",
)
@click.option(
    "--cloth",
    metavar="ENDSxPICKS:WEAVE",
    help="A swatch instead: threads per cm and plain, basket2/2, twill3/1S, satin8/3 or knit.",
)
@click.option(
    "--jitter",
    type=click.FloatRange(0, 0.3),
    default=0.0,
    show_default=True,
    help="Cloth: sd of the gaps between threads, as a share.",
)
@click.option(
    "--slub",
    type=click.FloatRange(0, 0.5),
    default=0.0,
    show_default=True,
    help="Cloth: sd of the yarn's thickness, as a share.",
)
@click.option(
    "--hair",
    type=click.FloatRange(0, 1),
    default=0.0,
    show_default=True,
    help="Cloth: how hairy the yarn is.",
)
@click.option(
    "--skew",
    type=click.FloatRange(-20, 20),
    default=0.0,
    show_default=True,
    help="Cloth: degrees the weft rises to the right of square.",
)
@click.option(
    "--bow",
    type=click.FloatRange(-0.1, 0.1),
    default=0.0,
    show_default=True,
    help="Cloth: depth of the weft's arc over the width.",
)
@click.option("--stripes", type=click.IntRange(1, 200), help="Cloth: threads in each coloured stripe.")
@click.option("--checks", is_flag=True, help="Cloth: stripes both ways.")
@click.option("--spot", type=click.Choice(["round", "ellipse", "diamond", "square", "line"]), default="round",
              show_default=True, help="Dot shape.")  # fmt: skip
@click.option(
    "--picture",
    type=click.Path(dir_okay=False),
    help="Picture to print; a drawn card if not given (cloth: none).",
)
@click.option(
    "--size", metavar="WxH", help="Sheet in inches; from the picture's shape at 2 in wide if not given."
)
@click.option(
    "--ppi", type=PpiType(), default="300", show_default=True, metavar="N|XxY", help="The scanner's rate."
)
@click.option(
    "--turn", type=float, default=0.0, show_default=True, help="Degrees the sheet lies turned, ccw."
)
@click.option(
    "--noise", type=click.FloatRange(0, 0.5), default=0.004, show_default=True, help="Sd, of full scale."
)
@click.option(
    "--lens", type=click.FloatRange(0, 5), default=0.35, show_default=True, help="Blur sigma, pixels."
)
@click.option(
    "--gain", type=click.FloatRange(0, 0.25), default=0.12, show_default=True, help="Dot gain at 50 %."
)
@click.option("--jpeg", type=click.IntRange(1, 100), help="Pass the scan through JPEG of this quality.")
@click.option("--seed", type=int, default=0, show_default=True, help="Noise and lattice phases.")
@shared("force", "json", "quiet")
def command(output: str, screens: tuple[str, ...], **flags: Any) -> int:
    """Make a test scan through the forward model, with its truth beside it.

    Beside OUTPUT are written OUTPUT's name with ``.unscreened``, the same ink
    scanned without a screen, and ``.truth.json``, what was printed exactly.

    \b
    Example:
      moire proof -o card.png --screen 133@15:cyan --screen 133@75:magenta \\
          --screen 133@0:yellow --screen 133@45:black --ppi 300
    """
    import msgspec

    from moire.cli.console import console, print_json
    from moire.proof import print_sheet, scan_cloth, scan_print
    from moire.scanfile import check_target, write, write_bytes
    from moire.scanner import Scanner

    target = Path(output)
    plain = target.with_name(f"{target.stem}.unscreened{target.suffix}")
    truth = target.with_name(f"{target.stem}.truth.json")
    inputs = [flags["picture"]] if flags["picture"] else []
    for path in (target, plain, truth):
        check_target(path, force=flags["force"], inputs=inputs)
    scanner = Scanner(
        ppi=flags["ppi"], turn_deg=flags["turn"], noise=flags["noise"], lens_px=flags["lens"],
        jpeg_quality=flags["jpeg"],
    )  # fmt: skip
    names = {"seed": flags["seed"], "name": target.name, "unscreened_name": plain.name}
    if flags["cloth"]:
        made = scan_cloth(_cloth(**flags), scanner, **names)
    else:
        orders = _orders(screens, flags["spot"])
        picture = _picture(flags["picture"])
        width, height = _size(flags["size"], picture.shape)
        sheet = print_sheet(
            picture, orders, width_in=width, height_in=height, gain=flags["gain"], seed=flags["seed"]
        )
        made = scan_print(sheet, scanner, **names)
    for pixels, path in ((made.unscreened, plain), (made.scan, target)):
        write(_as_scan(pixels, flags["ppi"], path.name), path, force=flags["force"], inputs=inputs)
    text = msgspec.json.format(msgspec.json.encode(made.truth), indent=1)
    write_bytes(text, truth, force=flags["force"], inputs=inputs)
    out = console(as_json=flags["as_json"], quiet=flags["quiet"])
    out.print(f"Wrote {target}, {plain.name} and {truth.name}.")
    if flags["as_json"]:
        print_json(made.truth)
    return 0


def _orders(screens: tuple[str, ...], spot: Any) -> Any:
    from moire.press import INKS
    from moire.proof import ScreenOrder

    out = []
    for text in screens or ("133@45:black",):
        match = _SCREEN.match(text)
        if not match or match["ink"] not in INKS or not 5 <= float(match["lpi"]) <= 600:
            raise click.BadParameter(
                f"{text!r}: write LPI@ANGLE:INK with 5 to 600 lpi and one of {', '.join(INKS)}",
                param_hint="--screen",
            )
        out.append(
            ScreenOrder(
                ruling_lpi=float(match["lpi"]), angle_deg=float(match["angle"]), ink=match["ink"], spot=spot
            )
        )
    if len({o.ink for o in out}) < len(out):
        raise click.BadParameter("each ink can have one screen only", param_hint="--screen")
    return tuple(out)


def _cloth(*, cloth: str, size: str | None, picture: str | None, **flags: Any) -> Any:
    from moire.bindings import parse_binding
    from moire.loom import KNIT, Cloth, stripes

    match = _CLOTH.match(cloth)
    setts = (float(match["ends"]), float(match["picks"])) if match else (0.0, 0.0)
    if match is None or not all(1 <= s <= 100 for s in setts):
        raise click.BadParameter(
            f"{cloth!r}: write ENDSxPICKS:WEAVE with 1 to 100 threads per cm, such as 18x15:twill3/1S",
            param_hint="--cloth",
        )
    if match["weave"] != KNIT:
        try:
            parse_binding(match["weave"])
        except ValueError as problem:
            raise click.BadParameter(str(problem), param_hint="--cloth") from problem
    figure = None if picture is None else _picture(picture)
    width, height = _size(size, (1, 1) if figure is None else figure.shape)
    bands = stripes(flags["stripes"], *_STRIPES) if flags["stripes"] else ()
    return Cloth(
        width_in=width, height_in=height, ends_per_cm=setts[0], picks_per_cm=setts[1], pattern=match["weave"],
        warp_stripes=bands, weft_stripes=bands if flags["checks"] else (), jitter=flags["jitter"],
        thickness=flags["slub"], hair=flags["hair"], skew_deg=flags["skew"], bow=flags["bow"],
        figure=figure, seed=flags["seed"],
    )  # fmt: skip


def _picture(path: str | None) -> Any:
    import numpy as np

    from moire.samples import rgb_codes
    from moire.scanfile import read
    from moire.scanner import srgb_decode
    from moire.testcard import draw_card

    encoded = draw_card() if path is None else rgb_codes(read(path)) / 255
    linear = srgb_decode(encoded).astype(np.float32)
    return linear[..., 0] if linear.shape[2] == 1 else linear


def _size(text: str | None, shape: tuple[int, ...]) -> tuple[float, float]:
    if text is None:
        return 2.0, 2.0 * shape[0] / shape[1]
    match = re.match(r"^([\d.]+)x([\d.]+)$", text.lower())
    size = (float(match[1]), float(match[2])) if match else (0.0, 0.0)
    if not all(0.05 <= side <= 50 for side in size):
        raise click.BadParameter(f"{text!r}: write WxH in inches, each 0.05 to 50", param_hint="--size")
    return size


def _as_scan(pixels: Any, ppi: tuple[float, float], name: str) -> Any:
    from moire.model import Scan

    return Scan(
        pixels=pixels, mode="rgb", bit_depth=8, ppi=ppi, ppi_source="option", ppi_in_file=ppi, name=name
    )
