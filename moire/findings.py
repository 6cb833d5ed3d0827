"""Findings: what each measured line is, and the evidence for it in words."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.beats import rosette_parents
from moire.blocks import BlockGrid
from moire.clothfinding import cloth_finding, folded_order, thread_beat, thread_lines
from moire.folds import Fold, judge_folds
from moire.grids import find_line_screen, sort_line
from moire.lattice import Lattice
from moire.model import Finding, Ink, Kind, Scan, WarpRuns
from moire.peaks import Peak
from moire.screens import measure_line_screen, name_inks, name_line_ink, on_axis, order_of
from moire.survey import Survey
from moire.weavealias import WeaveAlias
from moire.weaves import Threads, find_threads, is_surely_cloth, settle_threads

_TEXTURE_LINES, _TEXTURE_OBLIQUE = 4, 2
_OF_THE_CLOTH, _BEAT_SHARE = 0.15, 0.03
_LATTICES_OF_CLOTH, _KEEPS_STEP = 2, 0.995
_WINDOW_PX = 1024


@dataclass(frozen=True, slots=True, kw_only=True)
class Group:
    """A finding and the measured lines that belong to it, with their orders."""

    finding: Finding
    lines: list[tuple[Peak, tuple[int, int] | None]]


def group_lines(survey: Survey, second: Survey | None = None, warp: WarpRuns = "vertical") -> list[Group]:
    """Findings without visibility, screens first, then what remains."""
    threads = None
    # Cloth of equal setts is as square as a screen, but a press keeps step and threads do not.
    if _may_be_cloth(survey.lattices) and is_surely_cloth(_strong_window(survey)):
        survey = replace(survey, lattices=(), drifts=(), chroma=())
    if not survey.lattices:
        threads = _threads(survey, second)
    inks = name_inks(survey.lattices, survey.chroma)
    folds = judge_folds(survey, inks, second)
    groups = [
        _screen_group(survey, *each) for each in zip(survey.lattices, survey.drifts, inks, folds, strict=True)
    ]
    taken = {id(p) for g in survey.lattices for p in (g.first, g.second)}
    rest = []
    for peak in survey.peaks:
        if id(peak) in taken:
            continue
        for group, lattice in zip(groups, survey.lattices, strict=True):
            order = order_of(peak.f, lattice, 0.15 / survey.size, limit=6)
            if order is not None:
                group.lines.append((peak, order))
                break
        else:
            rest.append(peak)
    members: list[tuple[Peak, tuple[int, int] | None]] = []
    if threads is not None:
        members, taken_up = thread_lines(threads, survey.mixed, tuple(rest), size=survey.size)
        groups.append(Group(finding=cloth_finding(threads, survey.scan, warp), lines=members))
        rest = [p for p in rest if not any(p is m for m in taken_up)]
    ruled: tuple[tuple[Peak, int], ...] = ()
    if not survey.lattices and threads is None:
        ruled = find_line_screen(tuple(rest), ppi=survey.scan.ppi)
    if ruled:
        groups.append(_line_screen_group(survey, ruled))
        rest = [p for p in rest if not any(p is m for m, _ in ruled)]
    merged: dict[tuple[Kind, tuple[int, ...]], Group] = {}
    woven = max((p.amplitude for p, _ in members), default=0.0)
    textured = not survey.lattices and _is_texture(rest)
    for peak in rest:
        beat = None if threads is None else thread_beat(threads, peak.f, size=survey.size)
        if beat is not None and peak.amplitude > _BEAT_SHARE * woven:
            found = _beat_group(survey, peak, beat, parent=len(survey.lattices))
        else:
            found = _leftover(survey, peak, tuple(rest), woven=woven, textured=textured)
            if found.finding.kind in ("content", "unexplained") and threads is not None:
                found = _fine_beat(survey, peak, threads, parent=len(survey.lattices)) or found
        key = (found.finding.kind, found.finding.parents)
        if key in merged and found.finding.kind != "banding":
            merged[key].lines.extend(found.lines)
        else:
            merged[key] = found
            groups.append(found)
    if survey.blocks is not None and all(g.finding.kind != "block-grid" for g in groups):
        groups.append(_block_group(survey.blocks))
    return groups


def _threads(survey: Survey, second: Survey | None) -> Threads | None:
    """The cloth in a scan; where its threads may have folded, as another scan settles it."""
    threads = find_threads(survey.mixed, survey.spectrum)
    rate, other_rate = survey.scan.ppi, None if second is None else second.scan.ppi
    if threads is None or not threads.rivals or second is None or rate is None or other_rate is None:
        return threads
    other = find_threads(second.mixed, second.spectrum)
    return threads if other is None else settle_threads(threads, survey.mixed, rate, other, other_rate)


def _may_be_cloth(lattices: tuple[Lattice, ...]) -> bool:
    """Whether the strongest lattice is out of step enough to be of threads."""
    if not 1 <= len(lattices) <= _LATTICES_OF_CLOTH:
        return False
    return min(lattices[0].first.coherence, lattices[0].second.coherence) < _KEEPS_STEP


def _strong_window(survey: Survey) -> NDArray[np.float32]:
    """A part of the page where its strongest lattice lies, enough to see whether it keeps step."""
    hop = survey.size // 2
    weight = survey.lattices[0].first.weight
    y, x = (int(c) * hop for c in np.median(np.argwhere(weight >= 0.5 * weight.max()), axis=0))
    rows, columns = survey.mixed.shape
    top, left = (
        max(0, min(at - _WINDOW_PX // 2, length - _WINDOW_PX)) for at, length in ((y, rows), (x, columns))
    )
    return survey.mixed[top : top + _WINDOW_PX, left : left + _WINDOW_PX]


def _screen_group(survey: Survey, lattice: Lattice, drift: float, ink: Ink, fold: Fold | None) -> Group:
    coverage, regions = _extent(lattice.first.weight, lattice.second.weight, survey.size, survey.scan)
    ppi = survey.scan.ppi
    evidence = [
        f"two lines at right angles within {lattice.squareness_bins / survey.size:.5f} cycles per pixel, "
        f"in step over the page (coherence {lattice.first.coherence:.2f}, {lattice.second.coherence:.2f})"
    ]
    if drift:
        evidence = [
            f"two lines at right angles followed from tile to tile; their frequency drifts by {drift:.1%} "
            "over the page: a bent leaf, or a photograph taken by hand"
        ]
    if survey.chroma:
        evidence.append(f"colour read where JPEG's halved chroma folds it: {ink}")
    elif len(lattice.first.colour) == 3:
        r, g, b = lattice.first.colour
        evidence.append(f"absorbs red {r:.2f}, green {g:.2f}, blue {b:.2f}: {ink}")
    else:
        evidence.append("grey scan: the ink's colour was not recorded")
    if ppi is None:
        evidence.append("sampling rate unknown: ruling not given, folding not judged")
    else:
        evidence.append("no usual ruling fits" if fold is None else fold.words)
    finding = Finding(
        kind="halftone" if fold is None else fold.kind,
        confidence=round(float(1 - math.exp(-(min(lattice.first.z, lattice.second.z) - 4) / 2)), 3),
        visibility=0.0,
        coverage=coverage,
        regions=regions,
        lines=(),
        period_px=float(1 / np.hypot(*lattice.k1)),
        period_mm=_period_mm(lattice.k1, ppi),
        screen=None if fold is None else fold.screen,
        candidates=() if fold is None else fold.candidates,
        settled=fold is not None and fold.settled,
        drift=round(drift, 4),
        evidence=tuple(evidence),
    )
    first = replace(lattice.first, f=lattice.k1)
    second = replace(lattice.second, f=lattice.k2)
    return Group(finding=finding, lines=[(first, (1, 0)), (second, (0, 1))])


def _line_screen_group(survey: Survey, members: tuple[tuple[Peak, int], ...]) -> Group:
    peak = members[0][0]
    coverage, regions = _extent(peak.weight, peak.weight, survey.size, survey.scan)
    rate = np.array(survey.scan.ppi)
    ink = name_line_ink(peak.colour)
    finding = Finding(
        kind="halftone",
        confidence=round(float(1 - math.exp(-(peak.z - 4) / 2)), 3),
        visibility=0.0,
        coverage=coverage,
        regions=regions,
        lines=(),
        period_px=float(1 / np.hypot(*peak.f)),
        period_mm=_period_mm(peak.f, survey.scan.ppi),
        screen=measure_line_screen(peak.f * rate, float(np.max(peak.sigma * rate)), ink=ink),
        settled=False,
        evidence=(
            f"one line and {len(members) - 1} of its multiples, in step (coherence {peak.coherence:.2f}), "
            "with no partner at right angles: a screen of lines; one scan does not show a fold",
        ),
    )
    return Group(finding=finding, lines=[(p, (order, 0)) for p, order in members])


def _leftover(survey: Survey, peak: Peak, rest: tuple[Peak, ...], *, woven: float, textured: bool) -> Group:
    parents = rosette_parents(peak.f, survey.lattices, 0.2 / survey.size)
    settled = True
    if parents is not None:
        kind: Kind = "rosette"
        words = f"the sum of orders {parents[2]}"
    else:
        kind, words = sort_line(peak, rest, ppi=survey.scan.ppi, blocks=survey.blocks)
        if kind == "unexplained" and peak.amplitude < _OF_THE_CLOTH * woven:
            kind, words = "content", "a faint line beside the threads, most likely of the cloth"
        if kind in ("unexplained", "banding") and textured:
            kind, words = (
                "content",
                "one of many regular lines in several directions: a texture such as cloth",
            )
        settled = kind != "unexplained"
    related = () if parents is None else parents[:2]
    return _lone_line(survey, peak, kind, words, settled=settled, parents=related)


def _beat_group(survey: Survey, peak: Peak, beat: WeaveAlias, *, parent: int) -> Group:
    a, b = beat.order
    words = f"a beat with the pixel grid: order ({a:g}, {b:g}) of the threads, folded by {beat.fold}"
    return _lone_line(survey, peak, "alias", words, settled=True, parents=(parent,))


def _fine_beat(survey: Survey, peak: Peak, threads: Threads, *, parent: int) -> Group | None:
    """An order of the threads folded to a line as fine as they are: part of how the cloth looks."""
    order = folded_order(threads, peak.f, size=survey.size)
    if order is None:
        return None
    a, b = order.order
    words = f"order ({a:g}, {b:g}) of the threads, folded by {order.fold} to a line no coarser than they are"
    return _lone_line(survey, peak, "content", words, settled=True, parents=(parent,))


def _lone_line(
    survey: Survey, peak: Peak, kind: Kind, words: str, *, settled: bool, parents: tuple[int, ...]
) -> Group:
    coverage, regions = _extent(peak.weight, peak.weight, survey.size, survey.scan)
    finding = Finding(
        kind=kind,
        confidence=round(float(peak.coherence * (1 - math.exp(-(peak.z - 4) / 2))), 3),
        visibility=0.0,
        coverage=coverage,
        regions=regions,
        lines=(),
        period_px=float(1 / np.hypot(*peak.f)),
        period_mm=_period_mm(peak.f, survey.scan.ppi),
        settled=settled,
        parents=parents,
        evidence=(words,),
    )
    return Group(finding=finding, lines=[(peak, None)])


def _is_texture(peaks: list[Peak]) -> bool:
    """Many lines, several of them oblique: no scanner or codec makes these, cloth does."""
    oblique = sum(not on_axis(p.f) for p in peaks)
    return len(peaks) >= _TEXTURE_LINES and oblique >= _TEXTURE_OBLIQUE


def _block_group(blocks: BlockGrid) -> Group:
    finding = Finding(
        kind="block-grid",
        confidence=round(1 - math.exp(-blocks.score / 4), 3),
        visibility=0.0,
        coverage=1.0,
        regions=(),
        lines=(),
        period_px=float(blocks.period_px),
        evidence=(_block_words(blocks),),
    )
    return Group(finding=finding, lines=[])


def _block_words(blocks: BlockGrid) -> str:
    words = f"steps at every {blocks.period_px} px stand out by {blocks.score:.0f} standard errors"
    return words if blocks.period_px == 8 else words + ": blocks of 8 px, coded before an enlargement by two"


def _extent(
    a: NDArray[np.float32], b: NDArray[np.float32], size: int, scan: Scan
) -> tuple[float, tuple[tuple[int, int, int, int], ...]]:
    """Share of tiles that carry a pattern and boxes around them, largest first."""
    import cv2

    present = (np.maximum(a, b) > 0.2).astype(np.uint8)
    hop = size // 2
    rows, columns = present.shape
    _, _, stats, _ = cv2.connectedComponentsWithStats(present, connectivity=8)
    boxes = []
    for x, y, w, h, _ in sorted(stats[1:].tolist(), key=lambda s: -s[4])[:12]:
        # The last tiles stop short of the page's edge by less than a hop; the pattern does not.
        right = scan.width_px if x + w == columns else (x + w + 1) * hop
        bottom = scan.height_px if y + h == rows else (y + h + 1) * hop
        boxes.append((x * hop, y * hop, right - x * hop, bottom - y * hop))
    return float(present.mean()), tuple(boxes)


def _period_mm(f: NDArray[np.float64], ppi: tuple[float, float] | None) -> float | None:
    return None if ppi is None else float(25.4 / np.hypot(f[0] * ppi[0], f[1] * ppi[1]))
