"""The one path from a scan to everything found in it."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Literal

import moire
from moire.findings import group_lines
from moire.measures import levels_where_strong
from moire.model import Examination, Finding, Line, Scan, Viewing, WarpRuns
from moire.peaks import Peak
from moire.samples import tile_size
from moire.survey import Survey, take_survey
from moire.verdict import judge
from moire.vision import viewing_condition, visibility


def examine(
    scan: Scan,
    *,
    viewing: Literal["monitor", "print"] = "monitor",
    second: Scan | None = None,
    warp: WarpRuns = "vertical",
) -> Examination:
    """Find and explain every periodic pattern in one scan.

    Parameters
    ----------
    scan : Scan
        Of any mode and depth; without a ppi results are per pixel and say so.
    viewing : {"monitor", "print"}
        Condition under which visibility is judged.
    second : Scan or None
        Another scan of the same original, at another ppi or turned by a few degrees: it settles
        which screens are folded.
    warp : {"vertical", "horizontal"}
        Which threads of a cloth are its ends; a picture cannot tell.

    Returns
    -------
    Examination
        Findings, most visible first, a verdict and advice.
    """
    condition = viewing_condition(viewing)
    survey = _survey(scan)
    findings: tuple[Finding, ...] = ()
    if survey is not None:
        findings = _weigh(survey, None if second is None else _survey(second), condition, warp)
    verdict, worst, advice = judge(findings)
    if survey is None:
        verdict, advice = "refer", ("The scan is too small to measure a pattern in it: a person must look.",)
    if scan.ppi is None:
        advice += ("The sampling rate is unknown: give it with --ppi to have rulings in lines per inch.",)
    return Examination(
        software=f"moire {moire.__version__}",
        file=scan.name,
        sha256=scan.sha256,
        width_px=scan.width_px,
        height_px=scan.height_px,
        channels=scan.channels + (scan.alpha is not None),
        bit_depth=scan.bit_depth,
        ppi=scan.ppi,
        ppi_source=scan.ppi_source,
        ppi_in_file=scan.ppi_in_file,
        viewing=condition,
        verdict=verdict,
        visibility=worst,
        advice=advice,
        findings=findings,
    )


def _survey(scan: Scan) -> Survey | None:
    """What a scan holds; None where it is too small to hold a tile."""
    size = tile_size(scan)
    return take_survey(scan, size) if size else None


def _weigh(survey: Survey, second: Survey | None, condition: Viewing, warp: WarpRuns) -> tuple[Finding, ...]:
    """Named findings, screens first, then what remains."""
    groups = group_lines(survey, second, warp)
    used = [peak for group in groups for peak, _ in group.lines]
    levels = {}
    if used:
        amplitude, mean = levels_where_strong(survey.codes, used, size=survey.size)
        levels = {id(p): (float(a), float(m)) for p, a, m in zip(used, amplitude, mean, strict=True)}
    out = []
    for group in groups:
        lines, worst = [], 0.0
        for peak, order in group.lines:
            swing, tone = levels[id(peak)]
            lines.append(_line(peak, order, swing))
            f = (float(peak.f[0]), float(peak.f[1]))
            worst = max(worst, visibility(f, swing, tone, viewing=condition, ppi=survey.scan.ppi))
        out.append(replace(group.finding, lines=tuple(lines), visibility=worst))
    return tuple(out)


def _line(peak: Peak, order: tuple[int, int] | None, amplitude: float) -> Line:
    return Line(
        fx_cpp=float(peak.f[0]),
        fy_cpp=float(peak.f[1]),
        sigma_cpp=float(min(peak.sigma.max(), 1.0)),
        amplitude=amplitude,
        snr_db=float(10 / math.log(10) * peak.excess_nat),
        order=order,
    )
