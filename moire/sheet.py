"""The contact sheet of a batch: one page that sorts, filters and leads to every scan's report."""

from __future__ import annotations

import os
import re
from collections.abc import Iterable, Sequence
from pathlib import Path

import msgspec

from moire.contact import has_pictures, picture_paths
from moire.errors import OutputRefused
from moire.outcome import SEVERITY, Outcome
from moire.recipe import to_json
from moire.report import number, template_text
from moire.scanfile import write_bytes
from moire.volume import Volume

_MARK = 'content="moire contact sheet"'
_MARKUP = {"<": "\\u003c", ">": "\\u003e", "&": "\\u0026", "\u2028": "\\u2028", "\u2029": "\\u2029"}


class Row(msgspec.Struct, frozen=True, kw_only=True, array_like=True):
    """One scan as the page's script takes it: a list, to keep ten thousand of them small."""

    file: str
    folder: str
    verdict: str
    severity: int
    visibility: float
    kinds: tuple[str, ...]
    ruling: float | None
    what: str
    error: str
    pictures: str


def render_sheet(
    outcomes: Iterable[Outcome],
    *,
    folder: str,
    sheet: str,
    notes: Sequence[str] = (),
    made_at: str = "",
) -> str:
    """HTML of the contact sheet.

    Parameters
    ----------
    outcomes : iterable of Outcome
    folder : str
        The folder that was taken in.
    sheet : str
        The folder of the contact sheet, which holds the pictures already.
    notes : sequence of str
        What the batch shows as a whole, one sentence each.
    made_at : str
        Date and time, as text.
    """
    from jinja2 import Environment, PackageLoader

    environment = Environment(
        loader=PackageLoader("moire", "templates"), autoescape=True, trim_blocks=True, lstrip_blocks=True
    )
    rows = [_row(outcome, folder, sheet) for outcome in outcomes]
    rows.sort(key=lambda row: (-row.severity, -row.visibility, row.folder, row.file))
    verdicts = sorted(SEVERITY, key=lambda verdict: -SEVERITY[verdict])
    return environment.get_template("sheet.html").render(
        folder=folder,
        total=len(rows),
        verdicts=[(v, sum(row.verdict == v for row in rows)) for v in verdicts],
        kinds=sorted({kind for row in rows for kind in row.kinds}),
        rows=_script_safe(rows),
        notes=notes,
        made_at=made_at,
        css=template_text("report.css") + template_text("sheet.css"),
        script=template_text("sheet.js"),
    )


def check_sheet(sheet: str, folder: str) -> None:
    """Refuse a folder for the contact sheet in which it would harm something.

    Raises
    ------
    OutputRefused
        If it holds the folder that is taken in, or a page that is no contact sheet.
    """
    top, scans = os.path.realpath(sheet), os.path.realpath(folder)
    if os.path.commonpath([top, scans]) == top:
        raise OutputRefused(sheet, f"holds {folder}, where nothing is written: give a folder of its own")
    page = Path(sheet, "index.html")
    if page.exists() and _MARK not in page.read_text(encoding="utf-8", errors="replace")[:4096]:
        raise OutputRefused(str(page), "is not a contact sheet: give another folder")


def write_sheet(html: str, sheet: str) -> None:
    """Write the page whole or not at all; the one of an earlier run is replaced.

    Raises
    ------
    OutputRefused
    """
    write_bytes(html.encode(), Path(sheet, "index.html"), force=True)


def write_recipes(volumes: Sequence[Volume], sheet: str) -> list[str]:
    """Write each volume's recipe beside the sheet, and say where, one sentence each.

    Raises
    ------
    OutputRefused
    """
    notes = []
    for number_, volume in enumerate((v for v in volumes if v.recipe is not None), 1):
        assert volume.recipe is not None
        stem = re.sub(r"[^A-Za-z0-9_-]+", "-", volume.folder.rpartition("/")[2])[:60] or "volume"
        target = Path(sheet, "recipes", f"{number_:04d}-{stem}.json")
        target.parent.mkdir(exist_ok=True)
        write_bytes(to_json(volume.recipe), target, force=True)
        notes.append(f"To mend a leaf of {volume.folder}: moire mend LEAF -o OUT --recipe {target}")
    return notes


def what_of(outcome: Outcome) -> str:
    """The main pattern of a scan in a few words."""
    for finding in outcome.findings:
        if finding.screen is not None:
            s = finding.screen
            ruling = f"{number(s.ruling_lpi, 1)} lines/inch ({number(s.ruling_lpcm, 1)}/cm)"
            return f"{finding.kind}, {s.ink}, {ruling} at {number(s.angle_deg, 1)}°"
        if finding.weave is not None:
            w = finding.weave
            return f"{w.pattern} weave, {number(w.ends_per_cm, 1)} × {number(w.picks_per_cm, 1)} per cm"
    return ", ".join(dict.fromkeys(f.kind for f in outcome.findings)) or "no pattern"


def _row(outcome: Outcome, folder: str, sheet: str) -> Row:
    inside = outcome.path.startswith(folder.rstrip("/") + "/")
    place = outcome.path[len(folder.rstrip("/")) + 1 :] if inside else outcome.path
    shown = not outcome.error and has_pictures(sheet, outcome.sha256)
    rulings = [f.screen.ruling_lpi for f in outcome.findings if f.screen is not None]
    return Row(
        file=outcome.file + (f", page {outcome.page} of {outcome.pages}" if outcome.pages > 1 else ""),
        folder=place.rpartition("/")[0],
        verdict=outcome.verdict,
        severity=SEVERITY[outcome.verdict],
        visibility=round(outcome.visibility, 1),
        kinds=tuple(dict.fromkeys(f.kind for f in outcome.findings)),
        ruling=round(rulings[0], 1) if rulings else None,
        what=what_of(outcome),
        error=outcome.error,
        pictures=picture_paths(outcome.sha256)["report"].removesuffix(".html") if shown else "",
    )


def _script_safe(rows: list[Row]) -> str:
    """JSON that no text in it can end the script element of."""
    text = msgspec.json.encode(rows).decode()
    for sign, escape in _MARKUP.items():
        text = text.replace(sign, escape)
    return text
