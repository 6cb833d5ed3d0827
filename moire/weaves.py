"""Cloth: is this a weave, which one, and how many threads does it have."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from moire.bindingfit import BindingFit, find_lines, fit_binding
from moire.bindings import Binding, swapped
from moire.model import Finding, Scan, Weave
from moire.peaks import Candidate, Peak
from moire.refinement import refine
from moire.setts import coarse_map, sett_map, sett_places, sett_range
from moire.spectrum import tile_spectrum
from moire.threads import ThreadCount, count_threads
from moire.weavealias import WeaveAlias, explain_alias, thread_aliases

_TILE, _PITCH, _TILES_AT_MOST = 128, 64, 600
_SMALLEST_PX = 200
_COARSEST = 8
# Nats gained and weight of lines at fractions of the threads' frequencies, either pair being enough.
_SURE = ((14.0, 0.8), (9.0, 2.2), (20.0, 0.4))
_COUNTED_LINES = 8
_MEMBER_BINS, _PATCH = 0.8, 0.005
_KNIT_GAIN = 20.0
_DRIFT = 0.05
_SQUARE, _SURE_GAIN, _UNEVEN = 0.01, 24.0, 0.02
_COARSER, _BEAT_BINS, _HIGHEST_BEAT = 0.75, 0.4, 3.0
_JERSEY = Binding(pattern="knit", structure="single jersey", direction=None, matrix=np.zeros((1, 1), bool))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Threads:
    """A cloth's threads as observed.

    Attributes
    ----------
    fit : BindingFit
        The reading of the lines, at the size of the picture that showed it best.
    count : ThreadCount
        In pixels of that size.
    reduction : int
        By how many pixels that picture was reduced, each way.
    """

    fit: BindingFit
    count: ThreadCount
    reduction: int

    @property
    def warp(self) -> NDArray[np.float64]:
        """Thread frequency of the ends, cycles per pixel of the scan."""
        return self.count.warp / self.reduction

    @property
    def weft(self) -> NDArray[np.float64]:
        """Thread frequency of the picks, cycles per pixel of the scan."""
        return self.count.weft / self.reduction

    @property
    def like_screen(self) -> bool:
        """Whether the lines are those of a square screen at 45 degrees: an even weave of equal setts."""
        ratio = float(np.hypot(*self.warp) / np.hypot(*self.weft))
        return self.fit.binding.direction is None and abs(ratio - 1) < _SQUARE

    @property
    def surely_cloth(self) -> bool:
        """Whether it is clearly bound and both sets' gaps vary as yarns do: a press keeps step."""
        return self.fit.gain > _SURE_GAIN and min(self.count.jitter) > _UNEVEN


def find_threads(image: NDArray[np.float32]) -> Threads | None:
    """The cloth in a picture, or None.

    A table or a page of text also has lines on both axes; only cloth has the fractions of
    both at once that the binding of warp and weft makes.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Lightness or code values on a 0..255 scale.
    """
    best: tuple[BindingFit, NDArray[np.float32], int] | None = None
    reduction = 1
    small = image
    while reduction <= _COARSEST and min(small.shape) >= _SMALLEST_PX:
        pitch = max(_PITCH, math.isqrt(small.size // _TILES_AT_MOST))
        spectrum = tile_spectrum(small, size=_TILE, pitch=pitch)
        fit = as_cloth(fit_binding(spectrum, find_lines(spectrum)))
        if fit is not None and (best is None or fit.gain > best[0].gain):
            best = (fit, small, reduction)
        reduction *= 2
        small = _halve(small)
    if best is None:
        return None
    fit, small, reduction = best
    orders = np.array([o for _, o in fit.lines if max(map(abs, o)) <= 2][:_COUNTED_LINES])
    count = count_threads(small, np.stack([fit.warp, fit.weft], axis=1), orders)
    if count is None:
        return None
    threads = Threads(fit=fit, count=count, reduction=reduction)
    return None if threads.like_screen and not threads.surely_cloth else threads


def as_cloth(fits: tuple[BindingFit, ...]) -> BindingFit | None:
    """The best of several readings as a weave if it is sure enough, else None.

    It must be worth its words, and bound, not only ruled both ways: lines that a ruling worth
    more explains as well do not count as binding.
    """
    ruled = next((fit for fit in fits if fit.binding.pattern == "unknown"), None)
    for fit in fits:
        if fit.binding.pattern == "unknown":
            continue
        rival = [line for line, _ in ruled.lines] if ruled is not None and ruled.gain > fit.gain else []
        bound = sum(
            line.weight
            for line, order in fit.lines
            if any(abs(c - round(c)) > 1e-6 for c in order) and not any(line is r for r in rival)
        )
        if any(fit.gain > gain and bound > least for gain, least in _SURE):
            return fit
    return None if ruled is None or not _is_knit(ruled) else replace(ruled, binding=_JERSEY)


def _is_knit(ruled: BindingFit) -> bool:
    """Whether lines both ways are those of stitches, not of rules, type or a display.

    A loop shows two slanting legs, so wales have a strong second harmonic and every wale line is
    crossed by courses on both diagonals, while courses have no comb of harmonics.
    """
    level: dict[tuple[int, int], float] = {}
    for line, order in ruled.lines:
        h, k = round(order[0]), round(order[1])
        level[(h, k) if h > 0 or (h == 0 and k > 0) else (-h, -k)] = line.level_nat
    low = -math.inf
    wale, leg, course = level.get((1, 0), low), level.get((2, 0), low), level.get((0, 1), low)
    slants = [level.get(o, low) for o in ((1, 1), (1, -1))]
    doubled = max(level.get((2, 1), low), level.get((2, -1), low))
    return (
        ruled.gain > _KNIT_GAIN
        and leg > wale - 2.5
        and min(slants) > max(wale, course) - 3.5
        and doubled > leg - 4
        and level.get((0, 2), low) < course - 1.5
    )


def measure_weave(
    threads: Threads, ppi: tuple[float, float], *, warp_runs: Literal["vertical", "horizontal"] = "vertical"
) -> Weave:
    """Thread counts of a cloth at a known sampling rate.

    Parameters
    ----------
    threads : Threads
    ppi : (float, float)
    warp_runs : {"vertical", "horizontal"}
        Which threads are the ends; a picture cannot tell.
    """
    rate = np.array(ppi)
    warp, weft = threads.warp * rate, threads.weft * rate
    ends, picks = float(np.hypot(*warp)), float(np.hypot(*weft))
    scale = [float(np.hypot(*(f * rate)) / np.hypot(*f)) for f in (threads.warp, threads.weft)]
    sigma = [s / threads.reduction * k / 2.54 for s, k in zip(threads.count.sigma, scale, strict=True)]
    maps = sett_map(threads.count, threads.reduction, ppi)
    low, high = sett_range(maps)
    coarse = coarse_map(maps, threads.count)
    skew = math.degrees(math.atan2(weft[0], weft[1]) - math.atan2(-warp[1], warp[0]))
    weave = Weave(
        ends_per_cm=ends / 2.54,
        picks_per_cm=picks / 2.54,
        sigma_per_cm=max(sigma),
        ends_per_inch=ends,
        picks_per_inch=picks,
        pattern=threads.fit.binding.pattern,
        skew_deg=skew,
        structure=threads.fit.binding.structure,
        ends_sigma_per_cm=sigma[0],
        picks_sigma_per_cm=sigma[1],
        bow=threads.count.bow,
        ends_range_per_cm=(low[0], high[0]),
        picks_range_per_cm=(low[1], high[1]),
        places_per_cm=sett_places(maps),
        ends_map_per_cm=coarse[0],
        picks_map_per_cm=coarse[1],
    )
    return weave if warp_runs == "vertical" else _turned(weave, threads.fit.binding)


def _turned(weave: Weave, binding: Binding) -> Weave:
    """The weave with the threads across the page as its ends; its weft then runs down and has no bow."""
    return replace(
        weave,
        ends_per_cm=weave.picks_per_cm,
        picks_per_cm=weave.ends_per_cm,
        ends_per_inch=weave.picks_per_inch,
        picks_per_inch=weave.ends_per_inch,
        structure=swapped(binding).structure,
        ends_sigma_per_cm=weave.picks_sigma_per_cm,
        picks_sigma_per_cm=weave.ends_sigma_per_cm,
        bow=None,
        ends_range_per_cm=weave.picks_range_per_cm,
        picks_range_per_cm=weave.ends_range_per_cm,
        places_per_cm=tuple((p, e) for e, p in weave.places_per_cm),
        ends_map_per_cm=weave.picks_map_per_cm,
        picks_map_per_cm=weave.ends_map_per_cm,
    )


def cloth_finding(threads: Threads, scan: Scan) -> Finding:
    """What is told of a cloth; its lines and visibility are filled in by the caller."""
    binding, rate = threads.fit.binding, scan.ppi
    coverage, regions = _extent(threads, scan)
    worth = f"(worth {threads.fit.gain:.0f} nat)"
    if binding.pattern == "knit":
        evidence = [
            f"{len(threads.fit.lines)} lines of loops with two slanting legs each {worth}: a knit",
            "wales are taken to run down the page; per cm they stand as ends, courses as picks",
        ]
    else:
        evidence = [
            f"{len(threads.fit.lines)} lines at fractions of two thread frequencies, "
            f"as in a {binding.structure} weave {worth}",
            "which threads are the warp cannot be seen: ends are taken to run down the page",
        ]
    if rate is not None:
        evidence.extend(_count_words(threads, rate))
    return Finding(
        kind="weave",
        confidence=round(1 - math.exp(-(threads.fit.gain - _SURE[0][0] / 2) / 8), 3),
        visibility=0.0,
        coverage=coverage,
        regions=regions,
        lines=(),
        period_px=float(1 / np.hypot(*threads.warp)),
        period_mm=None if rate is None else float(25.4 / np.hypot(*(threads.warp * np.array(rate)))),
        weave=None if rate is None else measure_weave(threads, rate),
        evidence=tuple(evidence),
    )


def _count_words(threads: Threads, ppi: tuple[float, float]) -> list[str]:
    """What the standards' way of counting adds, and what a picture cannot say."""
    maps = sett_map(threads.count, threads.reduction, ppi)
    low, high = sett_range(maps)
    places = "; ".join(f"{ends:.1f} x {picks:.1f}" for ends, picks in sett_places(maps))
    drift = max(h / max(lo, 1e-9) - 1 for lo, h in zip(low, high, strict=True))
    drifts = drift > _DRIFT and max(threads.count.jitter) < drift
    caution = ["the sett changes over the picture, as in a photograph taken at a slant: read the range, "
               "not the mean"] if drifts else []  # fmt: skip
    return [
        *caution,
        f"at five places {places} ends x picks per cm (as ISO 7211-2 and ASTM D3775 count, which ask for "
        "longer pieces than most scans hold)",
        f"over the cloth {low[0]:.1f} to {high[0]:.1f} ends/cm and {low[1]:.1f} to {high[1]:.1f} picks/cm",
        "in a dispute the reference method is dissection; a plied yarn counts as one thread",
    ]


def thread_lines(
    threads: Threads, image: NDArray[np.float32], peaks: tuple[Peak, ...], *, size: int
) -> tuple[list[tuple[Peak, tuple[int, int] | None]], list[Peak]]:
    """The cloth's lines, and the peaks among `peaks` that they stand for.

    They are the two thread lines, those the weave was read from, and others of its orders.

    Parameters
    ----------
    threads : Threads
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale, mean of channels.
    peaks : tuple of Peak
        Lines found in the scan by other means.
    size : int
        Tile side that their weights refer to.
    """
    frame = np.stack([threads.warp, threads.weft], axis=1)
    levels = {(1.0, 0.0): (0.0, 0.0), (0.0, 1.0): (0.0, 0.0)}
    for line, order in threads.fit.lines:
        levels[order] = (line.z, line.excess_nat)
    out: list[tuple[Peak, tuple[int, int] | None]] = []
    for order, (z, excess) in levels.items():
        f = frame @ np.array(order)
        if np.abs(f).max() >= 0.5:
            continue
        kx, ky = np.rint(f * size).astype(int)
        candidate = Candidate(kx=int(kx), ky=int(ky), z=z, excess_nat=excess)
        (peak,) = refine(image, (candidate,), size=size)
        sigma = np.hypot(*(np.array(order) * np.array(threads.count.sigma) / threads.reduction))
        whole = all(float(c).is_integer() for c in order)
        named = (int(order[0]), int(order[1])) if whole else None
        out.append((replace(peak, f=f, sigma=np.full(2, sigma)), named))
    repeat = np.array(threads.fit.binding.repeat)
    known = [p for p, _ in out]
    taken = []
    for peak in peaks:
        near = np.rint(np.linalg.solve(frame, peak.f) * repeat) / repeat
        if np.hypot(*(frame @ near - peak.f)) < _MEMBER_BINS / size:
            taken.append(peak)
            same = [i for i, p in enumerate(known) if np.hypot(*(p.f - peak.f)) < _MEMBER_BINS / size]
            if not same:
                known.append(peak)
                out.append((peak, None))
    return out, taken


def thread_beat(threads: Threads, f: NDArray[np.float64], *, size: int) -> WeaveAlias | None:
    """The order of the threads that has folded to a line coarser than they are, or None."""
    finest = min(float(np.hypot(*threads.warp)), float(np.hypot(*threads.weft)))
    if np.hypot(*f) > _COARSER * finest:
        return None
    aliases = thread_aliases(threads.warp, threads.weft, orders=threads.fit.binding.orders(_HIGHEST_BEAT))
    return explain_alias(f, aliases, tolerance=_BEAT_BINS / size)


def _extent(threads: Threads, scan: Scan) -> tuple[float, tuple[tuple[int, int, int, int], ...]]:
    """Share of the scan that is cloth, and boxes around it, largest first."""
    import cv2

    present = threads.count.present.astype(np.uint8)
    rows, columns = present.shape
    _, _, stats, _ = cv2.connectedComponentsWithStats(present, connectivity=8)
    boxes = []
    scale = (scan.width_px / columns, scan.height_px / rows)
    for x, y, w, h, area in sorted(stats[1:].tolist(), key=lambda s: -s[4])[:12]:
        if area >= _PATCH * present.size:
            left, top = int(x * scale[0]), int(y * scale[1])
            boxes.append((left, top, round((x + w) * scale[0]) - left, round((y + h) * scale[1]) - top))
    return float(present.mean()), tuple(boxes)


def _halve(image: NDArray[np.float32]) -> NDArray[np.float32]:
    rows, columns = image.shape[0] // 2 * 2, image.shape[1] // 2 * 2
    cells = image[:rows, :columns].reshape(rows // 2, 2, columns // 2, 2)
    return np.ascontiguousarray(cells.mean(axis=(1, 3)), np.float32)
