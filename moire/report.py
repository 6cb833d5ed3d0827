"""The before-and-after report: one self-contained HTML page."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import msgspec

from moire.figures import CROP_PX, crop, labels, overview, shown_rgb, spectrum_figures
from moire.model import Examination, Finding, Mending, Scan
from moire.scanfile import PathLike, write_bytes

_VERDICTS = {
    "sound": ("Sound", "No artifact stands above the eye's threshold. The scan can be kept as it is."),
    "mendable": (
        "Mendable",
        "A pattern is visible, apart from picture detail. A derivative can be mended; the master stays.",
    ),
    "rescan": (
        "Rescan",
        "A pattern has folded into the picture band. No filter can tell it from detail: scan again.",
    ),
    "refer": ("Refer", "The cause cannot be told from this scan alone. A person must look."),
    "unreadable": ("Unreadable", "The file could not be read."),
}


def render_report(
    *,
    master: Scan,
    before: Examination,
    mending: Mending | None,
    derivative_sha256: str = "",
    derivative_name: str = "",
    made_at: str = "",
) -> str:
    """HTML of a report; without a mending it shows the examination alone.

    Parameters
    ----------
    master : Scan
    before : Examination
    mending : Mending or None
    derivative_sha256, derivative_name : str
        Of the file written.
    made_at : str
        Date and time, as text.
    """
    from jinja2 import Environment, PackageLoader

    environment = Environment(
        loader=PackageLoader("moire", "templates"), autoescape=True, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters["sigma"] = with_sigma
    named = tuple(zip(labels(before.findings), before.findings, strict=True))
    states = [master] if mending is None else [master, mending.scan]
    pictures = [shown_rgb(scan) for scan in states]
    view: dict[str, Any] = {
        "before": before,
        "verdict": _VERDICTS[before.verdict],
        "mending": mending,
        "overviews": [overview(rgb) for rgb in pictures],
        "places": _places(pictures, mending, master),
        "crop_px": CROP_PX,
        "spectra": spectrum_figures(states, before.findings),
        "screens": [(label, f) for label, f in named if f.screen is not None],
        "others": [(label, f) for label, f in named if f.screen is None],
        "named": named,
        "labels": [label for label, _ in named],
        "lines": _removed_lines(mending),
        "recipe_json": ""
        if mending is None
        else msgspec.json.format(msgspec.json.encode(mending.recipe), indent=2).decode(),
        "derivative_sha256": derivative_sha256,
        "derivative_name": derivative_name,
        "made_at": made_at,
        "rate": _rate(before.ppi),
        "rate_in_file": _rate(before.ppi_in_file),
        "css": _template_text("report.css"),
        "script": _template_text("report.js"),
    }
    return environment.get_template("report.html").render(view)


def write_report(html: str, path: PathLike, *, force: bool = False) -> None:
    """Write a report whole or not at all.

    Raises
    ------
    OutputRefused
    """
    write_bytes(html.encode(), path, force=force)


def with_sigma(value: float, sigma: float) -> str:
    """A value and its uncertainty with the digits that it warrants: two of sigma."""
    if not math.isfinite(sigma) or sigma <= 0:
        return f"{value:.2f}"
    digits = min(4, max(0, 1 - math.floor(math.log10(sigma))))
    return f"{value:.{digits}f} ± {sigma:.{digits}f}"


def _template_text(name: str) -> str:
    return (Path(__file__).parent / "templates" / name).read_text(encoding="utf-8")


def _rate(ppi: tuple[float, float] | None) -> str:
    if ppi is None:
        return "unknown"
    return f"{ppi[0]:g}" if ppi[0] == ppi[1] else f"{ppi[0]:g} × {ppi[1]:g}"


def _places(pictures: list[Any], mending: Mending | None, master: Scan) -> list[dict[str, Any]]:
    """1:1 crops at the places that changed most, in the master and at the same spot after."""
    if mending is None or not mending.worst_places:
        return []
    scale = mending.scan.width_px / master.width_px, mending.scan.height_px / master.height_px
    return [
        {
            "at": place,
            "before": crop(pictures[0], place),
            "after": crop(pictures[1], (round(place[0] * scale[0]), round(place[1] * scale[1]))),
        }
        for place in mending.worst_places
    ]


def _removed_lines(mending: Mending | None) -> list[dict[str, Any]]:
    """Lines of the mending with the label of the finding that they belong to."""
    if mending is None:
        return []
    owner: dict[tuple[float, float], tuple[str, Finding | None]] = {}
    for mark, found in zip(labels(mending.before.findings), mending.before.findings, strict=True):
        owner.update({(line.fx_cpp, line.fy_cpp): (mark, found) for line in found.lines})
    out = []
    for removed in mending.measures.lines:
        place = (removed.fx_cpp, removed.fy_cpp)
        label, finding = owner.get(place, ("", None))
        lines = () if finding is None else finding.lines
        order = next((line.order for line in lines if (line.fx_cpp, line.fy_cpp) == place), None)
        out.append({"label": label, "order": order, "line": removed})
    return out
