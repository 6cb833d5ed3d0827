"""The one path from a scan to everything found in it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

import moire
from moire.beats import rosette_parents
from moire.chroma import screen_colours
from moire.folds import Fold, judge_folds
from moire.grids import BLOCK_SCORE, BlockGrid, find_block_grid, sort_line
from moire.lattice import Lattice, find_lattices, missing_partners
from moire.measures import line_levels
from moire.model import Examination, Finding, Ink, Kind, Line, Scan, Viewing
from moire.peaks import Peak, find_candidates, measure_bins
from moire.refinement import polish, refine
from moire.samples import rate_aspect, rgb_codes, tile_size
from moire.screens import is_halftone, name_inks, on_axis, order_of
from moire.spectrum import tile_spectrum
from moire.verdict import judge
from moire.vision import lightness, viewing_condition, visibility
from moire.weaves import Threads, find_threads, measure_weave

_TILES_AT_MOST = 1200
_CALLED_Z = 3.0
_TEXTURE_LINES, _TEXTURE_OBLIQUE = 4, 2
_OF_THE_CLOTH = 0.15


def examine(scan: Scan, *, viewing: Literal["monitor", "print"] = "monitor") -> Examination:
    """Find and explain every periodic pattern in one scan.

    Parameters
    ----------
    scan : Scan
        Of any mode and depth; without a ppi results are per pixel and say so.
    viewing : {"monitor", "print"}
        Condition under which visibility is judged.

    Returns
    -------
    Examination
        Findings, most visible first, a verdict and advice.
    """
    condition = viewing_condition(viewing)
    channels = rgb_codes(scan)
    size = tile_size(scan)
    findings: tuple[Finding, ...] = ()
    if size:
        findings = _Survey.of(scan, channels, size).findings(condition)
    verdict, worst, advice = judge(findings)
    if not size:
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


@dataclass(frozen=True, slots=True, kw_only=True)
class _Survey:
    """What was measured in a scan before anything is named."""

    scan: Scan
    channels: NDArray[np.float32]
    size: int
    peaks: tuple[Peak, ...]
    lattices: tuple[Lattice, ...]
    blocks: BlockGrid | None

    @property
    def jpeg(self) -> bool:
        return self.scan.jpeg or self.blocks is not None

    @staticmethod
    def of(scan: Scan, channels: NDArray[np.float32], size: int) -> _Survey:
        mixed = channels.mean(axis=2)
        grid = find_block_grid(mixed)
        blocks = grid if grid.score > BLOCK_SCORE else None
        area = channels.shape[0] * channels.shape[1]
        pitch = max(size // 2, math.isqrt(area // _TILES_AT_MOST))
        spectrum = tile_spectrum(mixed, size=size, pitch=pitch)
        seen = refine(channels, find_candidates(spectrum), size=size)
        peaks = tuple(p for p in seen if _credible(p))
        # A partner too weak to stand out by itself counts where a coherent line calls for it.
        called = measure_bins(spectrum, missing_partners(peaks, size=size, aspect=rate_aspect(scan)))
        called = tuple(c for c in called if c.z > _CALLED_Z)
        peaks += tuple(p for p in refine(channels, called, size=size) if _credible(p) and p.coherence > 0.9)
        peaks = polish(channels, peaks, size=min(size, 64))
        jpeg = scan.jpeg or blocks is not None
        lattices = find_lattices(peaks, size=size, aspect=rate_aspect(scan), jpeg=jpeg)
        # Print or cloth is asked once, of the strongest: weak inks of a print cannot dominate it.
        if lattices and not is_halftone(lattices[0], lattices, seen, size):
            lattices = ()
        if jpeg and channels.shape[2] == 3:
            lattices = _with_folded_chroma(lattices, channels, size)
        return _Survey(
            scan=scan, channels=channels, size=size, peaks=peaks, lattices=lattices, blocks=blocks
        )  # fmt: skip

    def findings(self, condition: Viewing) -> tuple[Finding, ...]:
        """Named findings, screens first, then what remains."""
        groups = self._group()
        used = [peak for group in groups for peak, _ in group.lines]
        levels = {}
        if used:
            amplitude, _, mean, _ = line_levels(
                lightness(self.channels),
                np.array([p.f for p in used]),
                np.stack([p.weight for p in used]),
                size=self.size,
            )
            levels = {id(p): (float(a), float(m)) for p, a, m in zip(used, amplitude, mean, strict=True)}
        out = []
        for group in groups:
            lines, worst = [], 0.0
            for peak, order in group.lines:
                swing, tone = levels[id(peak)]
                lines.append(_line(peak, order, swing))
                f = (float(peak.f[0]), float(peak.f[1]))
                worst = max(worst, visibility(f, swing, tone, viewing=condition, ppi=self.scan.ppi))
            out.append(replace(group.finding, lines=tuple(lines), visibility=worst))
        return tuple(out)

    def _group(self) -> list[_Group]:
        inks = name_inks(self.lattices)
        folds: tuple[Fold | None, ...] = (None,) * len(self.lattices)
        if self.scan.ppi is not None:
            folds = judge_folds(
                self.lattices, inks, self.channels, self.scan.ppi, size=self.size, jpeg=self.jpeg
            )
        groups = [self._screen_group(*each) for each in zip(self.lattices, inks, folds, strict=True)]
        taken = {id(p) for g in self.lattices for p in (g.first, g.second)}
        rest = []
        for peak in self.peaks:
            if id(peak) in taken:
                continue
            for group, lattice in zip(groups, self.lattices, strict=True):
                order = order_of(peak.f, lattice, 0.15 / self.size, limit=6)
                if order is not None:
                    group.lines.append((peak, order))
                    break
            else:
                rest.append(peak)
        threads = None if self.lattices else find_threads(tuple(rest), size=self.size)
        if threads is not None:
            groups.append(self._cloth_group(threads))
            rest = [p for p in rest if not any(p is m for m in threads.members)]
        merged: dict[tuple[Kind, tuple[int, ...]], _Group] = {}
        woven = 0.0 if threads is None else max(p.amplitude for p in threads.members)
        textured = not self.lattices and _is_texture(rest)
        for peak in rest:
            found = self._leftover(peak, tuple(rest), woven=woven, textured=textured)
            key = (found.finding.kind, found.finding.parents)
            if key in merged and found.finding.kind != "banding":
                merged[key].lines.extend(found.lines)
            else:
                merged[key] = found
                groups.append(found)
        if self.blocks is not None and all(g.finding.kind != "block-grid" for g in groups):
            groups.append(_block_group(self.blocks))
        return groups

    def _cloth_group(self, threads: Threads) -> _Group:
        coverage, regions = _extent(threads.warp.weight, threads.weft.weight, self.size, self.scan)
        ppi = self.scan.ppi
        finding = Finding(
            kind="weave",
            confidence=round(float(min(threads.warp.local_coherence, threads.weft.local_coherence)), 3),
            visibility=0.0,
            coverage=coverage,
            regions=regions,
            lines=(),
            period_px=float(1 / np.hypot(*threads.warp.f)),
            period_mm=_period_mm(threads.warp.f, ppi),
            weave=None if ppi is None else measure_weave(threads, ppi),
            evidence=(f"thread lines near both axes, bound as in a {threads.pattern} weave",),
        )
        named: list[tuple[Peak, tuple[int, int] | None]] = [(threads.warp, (1, 0)), (threads.weft, (0, 1))]
        rest = (p for p in threads.members if p is not threads.warp and p is not threads.weft)
        named.extend((p, None) for p in rest)
        return _Group(finding=finding, lines=named)

    def _screen_group(self, lattice: Lattice, ink: Ink, fold: Fold | None) -> _Group:
        coverage, regions = _extent(lattice.first.weight, lattice.second.weight, self.size, self.scan)
        ppi = self.scan.ppi
        evidence = [
            f"two lines at right angles within {lattice.squareness_bins / self.size:.5f} cycles per pixel, "
            f"in step over the page (coherence {lattice.first.coherence:.2f}, {lattice.second.coherence:.2f})"
        ]
        if len(lattice.first.colour) == 3:
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
            evidence=tuple(evidence),
        )
        first = replace(lattice.first, f=lattice.k1)
        second = replace(lattice.second, f=lattice.k2)
        return _Group(finding=finding, lines=[(first, (1, 0)), (second, (0, 1))])

    def _leftover(self, peak: Peak, rest: tuple[Peak, ...], *, woven: float, textured: bool) -> _Group:
        coverage, regions = _extent(peak.weight, peak.weight, self.size, self.scan)
        parents = rosette_parents(peak.f, self.lattices, 0.2 / self.size)
        settled = True
        if parents is not None:
            kind: Kind = "rosette"
            words = f"the sum of orders {parents[2]}"
        else:
            kind, words = sort_line(peak, rest, ppi=self.scan.ppi, blocks=self.blocks)
            if kind == "unexplained" and peak.amplitude < _OF_THE_CLOTH * woven:
                kind, words = "content", "a faint line beside the threads, most likely of the cloth"
            if kind in ("unexplained", "banding") and textured:
                kind, words = (
                    "content",
                    "one of many regular lines in several directions: a texture such as cloth",
                )
            settled = kind != "unexplained"
        finding = Finding(
            kind=kind,
            confidence=round(float(peak.coherence * (1 - math.exp(-(peak.z - 4) / 2))), 3),
            visibility=0.0,
            coverage=coverage,
            regions=regions,
            lines=(),
            period_px=float(1 / np.hypot(*peak.f)),
            period_mm=_period_mm(peak.f, self.scan.ppi),
            settled=settled,
            parents=() if parents is None else parents[:2],
            evidence=(words,),
        )
        return _Group(finding=finding, lines=[(peak, None)])


@dataclass(frozen=True, slots=True, kw_only=True)
class _Group:
    finding: Finding
    lines: list[tuple[Peak, tuple[int, int] | None]]


def _with_folded_chroma(
    lattices: tuple[Lattice, ...], channels: NDArray[np.float32], size: int
) -> tuple[Lattice, ...]:
    """Lattices with the colours that JPEG's chroma sampling moved elsewhere."""
    if not lattices:
        return ()
    vectors = np.array([k for g in lattices for k in (g.k1, g.k2)])
    weights = np.stack([p.weight for g in lattices for p in (g.first, g.second)])
    colours = screen_colours(channels, vectors, weights, size=size).reshape(len(lattices), 2, 3)
    return tuple(
        replace(g, first=replace(g.first, colour=c[0]), second=replace(g.second, colour=c[1]))
        for g, c in zip(lattices, colours, strict=True)
    )


def _credible(peak: Peak) -> bool:
    # A line far above its background is there, even where its phase wanders with the paper.
    in_step = max(peak.coherence, peak.local_coherence) > (0.75 if peak.z > 20 else 0.85)
    return in_step and peak.tiles >= 6 and peak.off_bin < (1.1 if peak.coherence > 0.97 else 0.85)


def _is_texture(peaks: list[Peak]) -> bool:
    """Many lines, several of them oblique: no scanner or codec makes these, cloth does."""
    oblique = sum(not on_axis(p.f) for p in peaks)
    return len(peaks) >= _TEXTURE_LINES and oblique >= _TEXTURE_OBLIQUE


def _block_group(blocks: BlockGrid) -> _Group:
    finding = Finding(
        kind="block-grid",
        confidence=round(1 - math.exp(-blocks.score / 4), 3),
        visibility=0.0,
        coverage=1.0,
        regions=(),
        lines=(),
        period_px=float(blocks.period_px),
        evidence=(f"steps at every {blocks.period_px} px stand out by {blocks.score:.0f} standard errors",),
    )
    return _Group(finding=finding, lines=[])


def _line(peak: Peak, order: tuple[int, int] | None, amplitude: float) -> Line:
    return Line(
        fx_cpp=float(peak.f[0]),
        fy_cpp=float(peak.f[1]),
        sigma_cpp=float(min(peak.sigma.max(), 1.0)),
        amplitude=amplitude,
        snr_db=float(10 / math.log(10) * peak.excess_nat),
        order=order,
    )


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
