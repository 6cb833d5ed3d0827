"""The verdict on a scan and what a technician can do about it."""

from __future__ import annotations

import math
from collections.abc import Sequence

from moire.model import Finding, Kind, Verdict

ARTIFACTS: frozenset[Kind] = frozenset(
    {"halftone", "alias", "rosette", "banding", "block-grid", "display-grid", "stochastic", "unexplained"}
)
# Rates that scanners commonly offer (common practice, no source).
USUAL_PPI = (300, 400, 600, 800, 1200, 2400)
# A folded screen coarser than this (cycles per pixel) lies among picture detail.
PICTURE_BAND_CPP = 0.25


def judge(
    findings: tuple[Finding, ...], *, rates: Sequence[float] = USUAL_PPI
) -> tuple[Verdict, float, tuple[str, ...]]:
    """Verdict, largest visibility among artifacts, and advice in words.

    Parameters
    ----------
    findings : tuple of Finding
    rates : sequence of float
        Rates that the scanner has, ascending; advice names the coarsest that serves.
    """
    artifacts = [f for f in findings if f.kind in ARTIFACTS]
    seen = [f for f in artifacts if f.visibility >= 1]
    visibility = max((f.visibility for f in artifacts), default=0.0)
    if not seen:
        return "sound", visibility, ("No artifact is visible at this viewing condition. Keep the scan.",)
    folded = [f for f in seen if f.kind == "alias" and _in_picture_band(f)]
    if folded:
        return "rescan", visibility, (*_rescan_advice(folded, rates), _KEEPER)
    if any(f.drift for f in seen):
        drift = max(f.drift for f in seen)
        words = f"A screen's frequency drifts by {drift:.1%} over the page, which no filter here follows: "
        return "rescan", visibility, (words + "rescan it lying flat, or photograph it square on.", _KEEPER)
    kinds = {f.kind for f in seen}
    advice = []
    if "halftone" in kinds:
        advice.append("The printed screen is apart from picture detail: mend a derivative with `moire mend`.")
    # A cloth's beats name the weave that they are of; a folded screen is of nothing else.
    folds = [f for f in seen if f.kind == "alias"]
    if any(f.parents for f in folds):
        advice.append(
            "The threads of a cloth beat with the pixel grid: mend a derivative with `moire mend`, which "
            "keeps the weave; a finer scan, or a reduction that averages, shows no beat."
        )
    if any(not f.parents for f in folds):
        advice.append(
            "A screen is folded, but above picture detail: mend a derivative, or settle the cause with a "
            f"second scan at {_better_ppi(seen, rates)} ppi."
        )
    if kinds & {"banding", "block-grid"}:
        advice.append("Scanner or codec lines can be removed from a derivative with `moire mend`.")
    if kinds == {"unexplained"}:
        return "refer", visibility, ("A regular pattern has no known cause here: a person must look.",)
    return "mendable", visibility, tuple(advice or ["Mend a derivative with `moire mend`."])


_KEEPER = (
    "Rescanning exposes the original to light and handling: its keeper decides. The master stays as it is."
)


def _in_picture_band(finding: Finding) -> bool:
    return any(
        math.hypot(line.fx_cpp, line.fy_cpp) < PICTURE_BAND_CPP
        for line in finding.lines
        if line.order in ((1, 0), (0, 1))
    )


def _rescan_advice(folded: list[Finding], rates: Sequence[float]) -> list[str]:
    out = []
    for finding in folded:
        if not finding.candidates:
            out.append(f"Rescan at {_better_ppi([finding], rates)} ppi or turn the sheet by 7 degrees.")
            continue
        best = finding.candidates[0]
        out.append(
            f"A screen of about {best.ruling_lpi:.0f} lpi at {best.angle_deg:.0f} degrees is folded into the "
            f"picture: no filter can tell it from detail. Rescan at {_better_ppi([finding], rates)} ppi "
            "or more."
        )
    return out


def _better_ppi(findings: list[Finding], rates: Sequence[float]) -> str:
    rulings = [c.ruling_lpi for f in findings for c in f.candidates[:1]]
    # 2.83 f keeps the (1,1) order below half the rate at every angle; 10 % for scale and lens.
    wanted = 1.1 * 2.83 * max(rulings, default=200.0)
    return f"{next((rate for rate in rates if rate >= wanted), rates[-1]):g}"
