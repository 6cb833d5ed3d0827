"""The one path from a scan to everything found in it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

import moire
from moire.beats import rosette_parents
from moire.folding import Unfolded, unfold
from moire.grids import BLOCK_SCORE, BlockGrid, find_block_grid, sort_line
from moire.lattice import Lattice, find_lattices
from moire.model import Candidate, Examination, Finding, Ink, Kind, Line, Scan, Screen
from moire.peaks import Peak, find_candidates, polish, refine
from moire.screens import is_halftone, measure_screen, name_inks, on_axis, order_of
from moire.spectrum import tile_means, tile_phasors, tile_spectrum
from moire.verdict import judge
from moire.vision import lightness, viewing_condition, visibility

_TILES_AT_MOST = 1200
_SETTLED = 0.9


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


def rgb_codes(scan: Scan) -> NDArray[np.float32]:
    """Pixels as code values on a 0..255 scale, shape (rows, columns, 1 or 3)."""
    values = scan.pixels.astype(np.float32) * np.float32(255 / scan.full_scale)
    if scan.mode == "cmyk":
        # Without its profile a CMYK file is shown as ink amounts that multiply.
        values = (255 - values[..., :3]) * (1 - values[..., 3:4] / 255)
    return np.ascontiguousarray(values[..., None] if values.ndim == 2 else values)


def tile_size(scan: Scan) -> int:
    """Tile side for a scan: 128, coarser for high rates, 64 for small pictures, 0 if none fits."""
    short = min(scan.width_px, scan.height_px)
    if short < 128:
        return 0
    if short < 300:
        return 64
    return 256 if scan.ppi and min(scan.ppi) > 700 and short >= 1024 else 128


@dataclass(frozen=True, slots=True, kw_only=True)
class _Survey:
    """What was measured in a scan before anything is named."""

    scan: Scan
    channels: NDArray[np.float32]
    size: int
    peaks: tuple[Peak, ...]
    lattices: tuple[Lattice, ...]
    blocks: BlockGrid | None

    @staticmethod
    def of(scan: Scan, channels: NDArray[np.float32], size: int) -> _Survey:
        mixed = channels.mean(axis=2)
        grid = find_block_grid(mixed)
        blocks = grid if grid.score > BLOCK_SCORE else None
        area = channels.shape[0] * channels.shape[1]
        pitch = max(size // 2, math.isqrt(area // _TILES_AT_MOST))
        spectrum = tile_spectrum(mixed, size=size, pitch=pitch)
        peaks = tuple(p for p in refine(channels, find_candidates(spectrum), size=size) if _credible(p))
        peaks = polish(channels, peaks, size=min(size, 64))
        jpeg = scan.jpeg or blocks is not None
        lattices = find_lattices(peaks, size=size, aspect=_aspect(scan), jpeg=jpeg)
        lattices = tuple(g for g in lattices if is_halftone(g, lattices, peaks, size))
        return _Survey(
            scan=scan, channels=channels, size=size, peaks=peaks, lattices=lattices, blocks=blocks
        )  # fmt: skip

    def findings(self, condition: Any) -> tuple[Finding, ...]:
        """Named findings, screens first, then what remains."""
        groups = self._group()
        used = [peak for group in groups for peak, _ in group.lines]
        levels = _line_levels(self.channels, used, self.size)
        out = []
        for group in groups:
            lines, worst = [], 0.0
            for peak, order in group.lines:
                amplitude, mean = levels[id(peak)]
                lines.append(_line(peak, order, amplitude))
                f = (float(peak.f[0]), float(peak.f[1]))
                worst = max(worst, visibility(f, amplitude, mean, viewing=condition, ppi=self.scan.ppi))
            out.append(replace(group.finding, lines=tuple(lines), visibility=worst))
        return tuple(out)

    def _group(self) -> list[_Group]:
        groups = [self._screen_group(g, ink) for g, ink in zip(self.lattices, name_inks(self.lattices), strict=True)]
        taken = {id(p) for g in self.lattices for p in (g.first, g.second)}
        rest = []
        tolerance = 0.15 / self.size
        for peak in self.peaks:
            if id(peak) in taken:
                continue
            for group, lattice in zip(groups, self.lattices, strict=True):
                order = order_of(peak.f, lattice, tolerance, limit=6)
                if order is not None:
                    group.lines.append((peak, order))
                    break
            else:
                rest.append(peak)
        leftovers: dict[Kind, _Group] = {}
        for peak in rest:
            found = self._leftover(peak, tuple(rest))
            same = leftovers.get(found.finding.kind)
            if same is None or found.finding.kind in ("rosette", "banding", "unexplained"):
                groups.append(found)
                leftovers.setdefault(found.finding.kind, found)
            else:
                same.lines.append((peak, None))
        if self.blocks is not None and "block-grid" not in leftovers:
            groups.append(_block_group(self.blocks))
        return groups

    def _screen_group(self, lattice: Lattice, ink: Ink) -> _Group:
        coverage, regions = _extent(lattice.first.weight, lattice.second.weight, self.size)
        ppi = self.scan.ppi
        evidence = [
            f"two lines at right angles within {lattice.squareness_bins / self.size:.5f} cycles per pixel, "
            f"in step over the page (coherence {lattice.first.coherence:.2f} and {lattice.second.coherence:.2f})"
        ]
        if len(lattice.first.colour) == 3:
            r, g, b = lattice.first.colour
            evidence.append(f"absorbs red {r:.2f}, green {g:.2f}, blue {b:.2f}: {ink}")
        else:
            evidence.append("grey scan: the ink's colour was not recorded")
        kind: Kind = "halftone"
        settled, screen, candidates = True, None, ()
        if ppi is not None:
            options = unfold(lattice.k1, ppi, contrast=self._contrast(lattice))
            if options:
                kind, settled, screen, candidates, words = _decide(options, lattice, ppi, ink)
                evidence.append(words)
        else:
            evidence.append("sampling rate unknown: ruling not given, folding not judged")
        finding = Finding(
            kind=kind,
            confidence=round(float(1 - math.exp(-(min(lattice.first.z, lattice.second.z) - 4) / 2)), 3),
            visibility=0.0,
            coverage=coverage,
            regions=regions,
            lines=(),
            period_px=float(1 / np.hypot(*lattice.k1)),
            period_mm=_period_mm(lattice.k1, ppi),
            screen=screen,
            candidates=candidates,
            settled=settled,
            evidence=tuple(evidence),
        )
        first = replace(lattice.first, f=lattice.k1)
        second = replace(lattice.second, f=lattice.k2)
        return _Group(finding=finding, lines=[(first, (1, 0)), (second, (0, 1))])

    def _leftover(self, peak: Peak, rest: tuple[Peak, ...]) -> _Group:
        coverage, regions = _extent(peak.weight, peak.weight, self.size)
        parents = rosette_parents(peak.f, self.lattices, 0.2 / self.size)
        settled = True
        if parents is not None:
            kind: Kind = "rosette"
            words = f"the sum of orders {parents[2]}"
        else:
            kind, words = sort_line(peak, rest, ppi=self.scan.ppi, blocks=self.blocks)
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

    def _contrast(self, lattice: Lattice) -> float:
        """Observed modulation over that of a screen of this tone without loss, strongest channel."""
        channel = int(np.argmax(lattice.first.colour))
        plane = _linear(self.channels[..., channel])[..., None]
        phasors, _, _ = tile_phasors(plane, np.stack([lattice.k1, lattice.k2]), size=self.size)
        tone = tile_means(plane, size=self.size)[..., 0]
        white = float(np.percentile(plane, 99))
        swing = np.abs(phasors[..., 0]).max(axis=0)
        weight = np.minimum(lattice.first.weight, lattice.second.weight)
        strong = weight >= max(0.5 * float(weight.max()), 1e-6)
        share = np.clip(1 - tone[strong] / max(white, 1e-6), 0.05, 0.95)
        expected = 2 * _disc_coefficient(share) * white
        return float(np.median(swing[strong] / np.maximum(expected, 1e-6)))


@dataclass(frozen=True, slots=True, kw_only=True)
class _Group:
    finding: Finding
    lines: list[tuple[Peak, tuple[int, int] | None]]


def _credible(peak: Peak) -> bool:
    in_step = max(peak.coherence, peak.local_coherence) > 0.85
    return in_step and peak.tiles >= 6 and peak.off_bin < (1.1 if peak.coherence > 0.97 else 0.85)


def _aspect(scan: Scan) -> tuple[float, float]:
    if scan.ppi is None:
        return (1.0, 1.0)
    mean = math.sqrt(scan.ppi[0] * scan.ppi[1])
    return (scan.ppi[0] / mean, scan.ppi[1] / mean)


def _decide(
    options: tuple[Unfolded, ...], lattice: Lattice, ppi: tuple[float, float], ink: Ink
) -> tuple[Kind, bool, Screen, tuple[Candidate, ...], str]:
    best = options[0]
    rate = np.array(ppi)
    aspect = rate / math.sqrt(ppi[0] * ppi[1])
    k1 = np.array([best.fx_cpi, best.fy_cpi])
    turned = np.array([k1[1], -k1[0]])
    # The second vector's order is the one that brings it nearest to the first turned by 90 degrees.
    order2 = np.rint(turned / rate - lattice.k2)
    flipped = np.rint(turned / rate + lattice.k2)
    near = np.abs(turned / rate - lattice.k2 - order2).sum()
    k2 = (lattice.k2 + order2) * rate
    if np.abs(turned / rate + lattice.k2 - flipped).sum() < near:
        k2 = (flipped - lattice.k2) * rate
    scale = float(math.sqrt(ppi[0] * ppi[1]) * aspect.max())
    sigma = (float(lattice.first.sigma.max()) * scale, float(lattice.second.sigma.max()) * scale)
    screen = measure_screen(k1, k2, sigma, ink=ink)
    total = {"direct": sum(o.probability for o in options if o.order == (0, 0))}
    listed = tuple(
        Candidate(ruling_lpi=o.ruling_lpi, angle_deg=o.angle_deg, order=o.order, probability=o.probability)
        for o in options[:5]
        if o.probability > 0.005
    )
    edge = float(np.abs(np.abs(np.stack([lattice.k1, lattice.k2])) - 0.5).min())
    if best.order == (0, 0) and best.probability >= _SETTLED and edge > 0.005:
        words = f"not folded: probability {total['direct']:.3f} by ruling, angle and remaining contrast"
        return "halftone", True, screen, listed, words
    if best.order == (0, 0):
        words = "close to half the sampling rate or of odd contrast: a fold cannot be ruled out"
        return "halftone" if best.probability > 0.6 else "alias", False, screen, listed, words
    words = (
        f"folded: {best.ruling_lpi:.1f} lpi at {best.angle_deg:.1f} degrees by order {best.order} is the most "
        f"probable source ({best.probability:.2f}); a second scan at another ppi settles it"
    )
    return "alias", False, screen, listed, words


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


def _line_levels(
    channels: NDArray[np.float32], peaks: list[Peak], size: int
) -> dict[int, tuple[float, float]]:
    """L* amplitude and mean L* of each line where it is strong."""
    if not peaks:
        return {}
    plane = lightness(channels)[..., None]
    phasors, _, _ = tile_phasors(plane, np.array([p.f for p in peaks]), size=size)
    tone = tile_means(plane, size=size)[..., 0]
    out = {}
    for peak, v in zip(peaks, phasors[..., 0], strict=True):
        total = max(float(peak.weight.sum()), 1e-9)
        amplitude = float((np.abs(v) * peak.weight).sum() / total)
        out[id(peak)] = (amplitude, float((tone * peak.weight).sum() / total))
    return out


def _extent(
    a: NDArray[np.float32], b: NDArray[np.float32], size: int
) -> tuple[float, tuple[tuple[int, int, int, int], ...]]:
    """Share of tiles that carry a pattern and boxes around them, largest first."""
    import cv2

    present = (np.maximum(a, b) > 0.2).astype(np.uint8)
    hop = size // 2
    _, _, stats, _ = cv2.connectedComponentsWithStats(present, connectivity=8)
    boxes = sorted(stats[1:], key=lambda s: -int(s[4]))[:12]
    return float(present.mean()), tuple(
        (int(x) * hop, int(y) * hop, (int(w) + 1) * hop, (int(h) + 1) * hop) for x, y, w, h, _ in boxes
    )


def _period_mm(f: NDArray[np.float64], ppi: tuple[float, float] | None) -> float | None:
    return None if ppi is None else float(25.4 / np.hypot(f[0] * ppi[0], f[1] * ppi[1]))


def _linear(codes: NDArray[np.float32]) -> NDArray[np.float32]:
    encoded = codes / 255
    return np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4).astype(np.float32)


def _disc_coefficient(share: NDArray[np.floating]) -> NDArray[np.float64]:
    """First Fourier coefficient of a Euclidean dot of a given area share (transform of a disc)."""
    from scipy.special import j1

    r = np.sqrt(np.minimum(share, 1 - share) / np.pi)
    return np.asarray(r * j1(2 * np.pi * r))
