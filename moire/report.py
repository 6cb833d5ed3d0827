"""The before-and-after report: one self-contained HTML page."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import msgspec

from moire.figures import crop, crop_box, labels, overview, shown_rgb, spectrum_figures
from moire.model import Examination, Finding, Line, Mending, Scan
from moire.scanfile import PathLike, write_bytes
from moire.units import to_cpi

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
    environment.filters.update(sigma=with_sigma, number=number, period=_period, cells=_cells)
    named = tuple(zip(labels(before.findings), before.findings, strict=True))
    states = [master] if mending is None else [master, mending.scan]
    pictures = [shown_rgb(scan) for scan in states]
    view: dict[str, Any] = {
        "before": before,
        "verdict": _VERDICTS[before.verdict],
        "mending": mending,
        "overviews": [overview(rgb) for rgb in pictures],
        "places": _places(pictures, mending, master),
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
        "rate_after": "" if mending is None else _rate(mending.scan.ppi),
        "advice": _advice(before, mending),
        "css": template_text("report.css"),
        "script": template_text("report.js"),
    }
    return environment.get_template("report.html").render(view)


def write_report(html: str, path: PathLike, *, force: bool = False) -> None:
    """Write a report whole or not at all.

    Raises
    ------
    OutputRefused
    """
    write_bytes(html.encode(), path, force=force)


def number(value: float, digits: int) -> str:
    """A number with a true minus sign, and no sign on zero."""
    text = f"{value:.{digits}f}"
    return text.lstrip("-") if float(text) == 0 else text.replace("-", "\N{MINUS SIGN}")


def with_sigma(value: float, sigma: float) -> str:
    """A value and its uncertainty with the digits that it warrants: two of sigma."""
    if not math.isfinite(sigma) or sigma <= 0:
        return number(value, 2)
    digits = _warranted(sigma, 4)
    return f"{number(value, digits)} ± {max(sigma, 10.0**-digits):.{digits}f}"


def _warranted(sigma: float, most: int) -> int:
    """Decimals that an uncertainty warrants: two digits of it, at most `most`."""
    if not math.isfinite(sigma) or sigma <= 0:
        return most
    return min(most, max(0, 1 - math.floor(math.log10(sigma))))


def _cells(rows: tuple[tuple[float | None, ...], ...], spread: tuple[float, float]) -> list[dict[str, Any]]:
    """Squares of a map of setts, ten units wide, darker where threads lie closer; none off the cloth."""
    span = max(spread[1] - spread[0], 1e-9)
    out = []
    for i, row in enumerate(rows):
        for j, value in enumerate(row):
            if value is not None:
                grey = round(235 - 170 * min(max((value - spread[0]) / span, 0.0), 1.0))
                out.append(
                    {"x": 10 * j, "y": 10 * i, "value": value, "fill": f"#{grey:02x}{grey:02x}{grey:02x}"}
                )
    return out


def _period(finding: Finding, unit: str) -> str:
    """Period in ``px`` or ``mm``; 1/f has the uncertainty sigma_f / f**2."""
    value = finding.period_px if unit == "px" else finding.period_mm
    if value is None:
        return "–"
    sigma = finding.lines[0].sigma_cpp * finding.period_px * value if finding.lines else 0.0
    return number(value, _warranted(sigma, 2 if unit == "px" else 3))


def _advice(before: Examination, mending: Mending | None) -> tuple[str, ...]:
    """What to do now: the scan's advice, or after a mending what is left of it."""
    if mending is None or not mending.recipe.removals:
        return before.advice
    lines = before.advice if before.verdict in ("rescan", "refer") else ()
    if mending.after.verdict == "sound":
        return (*lines, "Show and print the derivative; keep the master as it is.")
    return tuple(dict.fromkeys((*lines, *mending.after.advice)))


def template_text(name: str) -> str:
    """A style or script that goes into a page as it stands."""
    return (Path(__file__).parent / "templates" / name).read_text(encoding="utf-8")


def _rate(ppi: tuple[float, float] | None) -> str:
    if ppi is None:
        return "unknown"
    return f"{ppi[0]:g}" if ppi[0] == ppi[1] else f"{ppi[0]:g} × {ppi[1]:g}"


def _places(pictures: list[Any], mending: Mending | None, master: Scan) -> list[dict[str, Any]]:
    """1:1 crops at the places that changed most: the same piece of the page before and after."""
    if mending is None:
        return []
    scale = mending.scan.width_px / master.width_px, mending.scan.height_px / master.height_px
    out = []
    for place in mending.worst_places:
        x, y, width, height = crop_box(master.width_px, master.height_px, place)
        after = (
            round(x * scale[0]),
            round(y * scale[1]),
            max(1, round(width * scale[0])),
            max(1, round(height * scale[1])),
        )
        out.append(
            {
                "at": place,
                "before": crop(pictures[0], (x, y, width, height)),
                "after": crop(pictures[1], after),
            }
        )
    return out


def _removed_lines(mending: Mending | None) -> list[dict[str, Any]]:
    """Lines of the mending with the label, order and digits of the line that was found there."""
    if mending is None:
        return []
    owner: dict[tuple[float, float], tuple[str, Line]] = {}
    for mark, found in zip(labels(mending.before.findings), mending.before.findings, strict=True):
        owner.update({(line.fx_cpp, line.fy_cpp): (mark, line) for line in found.lines})
    out = []
    for removed in mending.measures.lines:
        label, line = owner.get((removed.fx_cpp, removed.fy_cpp), ("", None))
        sigma = 0.0 if line is None else line.sigma_cpp
        rate = mending.before.ppi
        out.append(
            {
                "label": label,
                "order": None if line is None else line.order,
                "line": removed,
                "cpp": _pair((removed.fx_cpp, removed.fy_cpp), (sigma, sigma), 5),
                "cpi": ""
                if rate is None
                else _pair(to_cpi(removed.fx_cpp, removed.fy_cpp, rate), to_cpi(sigma, sigma, rate), 2),
            }
        )
    return out


def _pair(values: tuple[float, float], sigmas: tuple[float, float], most: int) -> str:
    return ", ".join(number(v, _warranted(s, most)) for v, s in zip(values, sigmas, strict=True))
