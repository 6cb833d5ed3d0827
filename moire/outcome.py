"""What became of one file of a batch: its examination, or why there is none."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any, Literal

import moire
from moire.model import Examination, Finding, Kind, Verdict
from moire.verdict import ARTIFACTS, USUAL_PPI, judge
from moire.vision import viewing_condition

# Worst first: the order of tables and contact sheets.
SEVERITY: dict[Verdict, int] = {"unreadable": 4, "rescan": 3, "refer": 2, "mendable": 1, "sound": 0}
_DAMAGED = "The file could not be examined: copy or scan it again while the original is at hand."


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome(Examination):
    """One line of a batch: the keys of an examination and how it came about.

    Attributes
    ----------
    path : str
        Absolute path of the file; bytes that are not UTF-8 are written as ``\\xNN``.
    material : str
        Name of the profile's material whose rules applied, or ''.
    page, pages : int
        The page that the findings are of, the worst of the file, and how many there are.
    error : str
        Why the file could not be examined; '' where it could.
    seconds : float
        Time spent on the file.
    examined_at : str
        When, in ISO 8601 with the offset from UTC.
    """

    format: str = "moire.outcome"
    path: str
    material: str = ""
    page: int = 1
    pages: int = 1
    error: str = ""
    seconds: float = 0.0
    examined_at: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Terms:
    """What a file is examined under; another value here is another result.

    Attributes
    ----------
    ppi : (float, float) or None
        Sampling rate that wins over the file's own.
    viewing : {"monitor", "print"}
    visible_from : float
        Visibility from which an artifact counts; the eye's threshold is 1.
    accepted : tuple of str
        Kinds that never count in this material.
    scanner_ppi : tuple of float
        Rates that the bureau's scanner has, for advice; empty if not stated.
    material : str
    """

    ppi: tuple[float, float] | None = None
    viewing: Literal["monitor", "print"] = "monitor"
    visible_from: float = 1.0
    accepted: tuple[Kind, ...] = ()
    scanner_ppi: tuple[float, ...] = ()
    material: str = ""


def path_text(path: str | os.PathLike[str]) -> str:
    """An absolute path as text that any database and JSON can hold."""
    return os.fsencode(os.path.abspath(path)).decode("utf-8", "backslashreplace")


def rank(found: Examination) -> tuple[int, float]:
    """How bad a result is: severity of the verdict, then visibility."""
    return SEVERITY[found.verdict], found.visibility


def worst(found: Sequence[Examination]) -> int:
    """Index of the worst of several results; the first of equals."""
    return max(range(len(found)), key=lambda i: (*rank(found[i]), -i))


def counted(finding: Finding, terms: Terms) -> bool:
    """Whether a finding counts for the verdict under these terms."""
    artifact = finding.kind in ARTIFACTS and finding.kind not in terms.accepted
    return artifact and finding.visibility >= terms.visible_from


def under_terms(found: Examination, terms: Terms) -> Examination:
    """The same findings judged by a material's own limits."""
    if found.verdict == "refer" and not found.findings:
        return found
    if terms.visible_from == 1 and not terms.accepted and not terms.scanner_ppi:
        return found
    weighed = tuple(
        replace(f, visibility=f.visibility / terms.visible_from)
        for f in found.findings
        if f.kind not in terms.accepted
    )
    verdict, visibility, advice = judge(weighed, rates=terms.scanner_ppi or USUAL_PPI)
    # What was said for other reasons than the findings' stays said.
    usual = judge(found.findings)[2]
    advice += tuple(line for line in found.advice if line not in usual)
    return replace(found, verdict=verdict, visibility=visibility * terms.visible_from, advice=advice)


def succeeded(found: Examination, path: str, **more: Any) -> Outcome:
    """Outcome of a file that was examined."""
    values = {f.name: getattr(found, f.name) for f in fields(found) if f.name != "format"}
    return Outcome(**values, path=path, **more)


def failed(path: str, reason: str, terms: Terms, **more: Any) -> Outcome:
    """Outcome of a file that could not be examined; empty is the same type as full."""
    values: dict[str, Any] = {"sha256": ""} | more
    return Outcome(
        software=f"moire {moire.__version__}",
        file=path.replace("\\", "/").rsplit("/", 1)[-1],
        width_px=0,
        height_px=0,
        channels=0,
        bit_depth=0,
        ppi=None,
        ppi_source=None,
        ppi_in_file=None,
        viewing=viewing_condition(terms.viewing),
        verdict="unreadable",
        visibility=0.0,
        advice=(_DAMAGED,),
        findings=(),
        path=path,
        error=reason,
        material=terms.material,
        **values,
    )
