"""Cloth: is this a weave, which one, and how many threads does it have."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.bindingfit import BindingFit, fit_binding
from moire.bindings import Binding, swapped
from moire.foldedcloth import REACH_CPP, Rival, fit_folded, is_beyond_reach, settle_setts, weigh
from moire.model import WarpRuns, Weave
from moire.setts import coarse_map, sett_map, sett_places, sett_range
from moire.spectrallines import find_lines
from moire.spectrum import Spectrum, tile_spectrum
from moire.swatches import count_cloth
from moire.threads import ThreadCount, gap_jitter

_TILE, _PITCH, _TILES_AT_MOST = 128, 64, 600
_SMALLEST_PX = 200
_COARSEST = 8
# Nats gained and weight of lines at fractions of the threads' frequencies, either pair being enough.
SURE = ((14.0, 0.8), (9.0, 2.2), (20.0, 0.4))
_COUNTED_LINES, _SETTLED = 8, 0.9
# No reading that folds is worth as much: it would need lines that lens and aperture do not leave.
_CLEAR_GAIN = 45.0
_KNIT_GAIN = 20.0
_SQUARE, _SURE_GAIN, _UNEVEN = 0.01, 24.0, 0.02
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
    rivals : tuple of Rival
        Readings to choose from where threads may be finer than the grid reaches, most probable first.
    proven : bool
        Whether another scan bears out the reading that was taken.
    """

    fit: BindingFit
    count: ThreadCount
    reduction: int
    rivals: tuple[Rival, ...] = ()
    proven: bool = False

    @property
    def warp(self) -> NDArray[np.float64]:
        """Thread frequency of the ends, cycles per pixel of the scan."""
        return self.count.warp / self.reduction

    @property
    def weft(self) -> NDArray[np.float64]:
        """Thread frequency of the picks, cycles per pixel of the scan."""
        return self.count.weft / self.reduction

    @property
    def beyond_reach(self) -> bool:
        """Whether threads are finer than the sampling grid can show."""
        return is_beyond_reach(self.warp, self.weft)

    @property
    def settled(self) -> bool:
        """Whether one reading is the right one: of folded threads no single scan can tell."""
        clear = not self.rivals or self.rivals[0].probability > _SETTLED
        return clear and (self.proven or not self.beyond_reach)

    @property
    def like_screen(self) -> bool:
        """Whether the lines are those of a square screen at 45 degrees: an even weave of equal setts.

        A screen's own lines stand above their sums; threads of a coarse cloth stand above its binding.
        """
        ratio = float(np.hypot(*self.warp) / np.hypot(*self.weft))
        threads = [line.level_nat for line, (a, b) in self.fit.lines if {abs(a), abs(b)} == {0.0, 1.0}]
        bound = [line.level_nat for line, (a, b) in self.fit.lines if max(abs(a), abs(b)) < 1]
        ruled = len(threads) > 1 and min(threads) > max(bound, default=-math.inf)
        return self.fit.binding.direction is None and abs(ratio - 1) < _SQUARE and not ruled

    @property
    def surely_cloth(self) -> bool:
        """Whether it is clearly bound and both sets' gaps vary as yarns do: a press keeps step."""
        return self.fit.gain > _SURE_GAIN and min(self.count.jitter) > _UNEVEN


def find_threads(image: NDArray[np.float32], spectrum: Spectrum | None = None) -> Threads | None:
    """The cloth in a picture, or None.

    A table or a page of text also has lines on both axes; only cloth has the fractions of
    both at once that the binding of warp and weft makes.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Lightness or code values on a 0..255 scale.
    spectrum : Spectrum or None
        Of this picture, where it has been measured already.
    """
    reading = read_cloth(image, spectrum)
    threads = None if reading is None else _count(reading)
    return None if threads is None or (threads.like_screen and not threads.surely_cloth) else threads


def settle_threads(
    threads: Threads,
    image: NDArray[np.float32],
    ppi: tuple[float, float],
    other: Threads,
    other_ppi: tuple[float, float],
) -> Threads:
    """Threads counted anew by the reading that another scan of the same cloth bears out.

    Parameters
    ----------
    threads, other : Threads
        As found in this scan and in the other.
    image : ndarray, shape (rows, columns)
        This scan.
    ppi, other_ppi : (float, float)
        Rates of both.
    """
    scaled = replace(other.fit, warp=other.warp, weft=other.weft)
    others = other.rivals or (Rival(fit=scaled, probability=1.0),)
    rivals = settle_setts(threads.rivals, ppi, others, other_ppi)
    if not rivals or rivals is threads.rivals:
        return threads
    fit = rivals[0].fit
    chosen = threads if fit is threads.fit else _count(_Reading(fit=fit, image=image, reduction=1))
    return threads if chosen is None else replace(chosen, rivals=rivals, proven=True)


def _count(reading: _Reading) -> Threads | None:
    count = count_cloth(reading.image, reading.fit.frame, reading.orders)
    if count is None:
        return None
    return Threads(fit=reading.fit, count=count, reduction=reading.reduction, rivals=reading.rivals)


def is_surely_cloth(image: NDArray[np.float32]) -> bool:
    """Whether a picture is clearly of bound threads whose gaps vary as yarns do, without counting them."""
    reading = read_cloth(image)
    if reading is None or reading.fit.gain <= _SURE_GAIN:
        return False
    return min(gap_jitter(reading.image, reading.fit.frame, reading.orders)) > _UNEVEN


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Reading:
    """The surest reading of a picture as a weave, and the picture reduced as it was then."""

    fit: BindingFit
    image: NDArray[np.float32]
    reduction: int
    rivals: tuple[Rival, ...] = ()

    @property
    def orders(self) -> NDArray[np.float64]:
        """Lines to count by, strongest first, as orders of warp and weft; those that do not fold."""
        low = [o for line, o in self.fit.lines if max(map(abs, o)) <= 2 and np.abs(line.f).max() < REACH_CPP]
        return np.array(low[:_COUNTED_LINES]).reshape(-1, 2)


def read_cloth(image: NDArray[np.float32], spectrum: Spectrum | None = None) -> _Reading | None:
    """The weave that a picture's lines are read as most surely, at any of four sizes."""
    best: _Reading | None = None
    reduction = 1
    small = image
    while reduction <= _COARSEST and min(small.shape) >= _SMALLEST_PX:
        if reduction > 1 or spectrum is None or spectrum.size != _TILE:
            pitch = max(_PITCH, math.isqrt(small.size // _TILES_AT_MOST))
            spectrum = tile_spectrum(small, size=_TILE, pitch=pitch)
        lines = find_lines(spectrum)
        fits = fit_binding(spectrum, lines)
        fit = as_cloth(fits)
        if reduction == 1:
            unsure = fit is None or fit.gain < _CLEAR_GAIN
            best = _full_size(fit, fits, fit_folded(spectrum, lines) if unsure else (), small)
        elif fit is not None and (best is None or fit.gain > best.fit.gain):
            best = _Reading(fit=fit, image=small, reduction=reduction)
        reduction *= 2
        small = _halve(small)
    return best


def _full_size(
    fit: BindingFit | None,
    fits: tuple[BindingFit, ...],
    folded: tuple[BindingFit, ...],
    image: NDArray[np.float32],
) -> _Reading | None:
    """The reading at full size, where threads may also have folded."""
    ruled = tuple(f for f in fits if f.binding.pattern == "unknown")
    beyond = as_cloth((*folded, *ruled))
    if fit is None and beyond is None:
        return None
    best = max((f for f in (fit, beyond) if f is not None), key=lambda f: f.gain)
    sure = tuple(f for f in (*fits, *folded) if f.binding.pattern != "unknown" and f.gain > SURE[1][0])
    return _Reading(fit=best, image=image, reduction=1, rivals=weigh(sure, _TILE))


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
        if any(fit.gain > gain and bound > least for gain, least in SURE):
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


def measure_weave(threads: Threads, ppi: tuple[float, float], *, warp_runs: WarpRuns = "vertical") -> Weave:
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
    # Wales are told from courses by their loops, whatever the user holds for the warp.
    as_seen = warp_runs == "vertical" or weave.pattern == "knit"
    return weave if as_seen else _turned(weave, threads.fit.binding)


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


def _halve(image: NDArray[np.float32]) -> NDArray[np.float32]:
    import cv2

    rows, columns = image.shape[0] // 2, image.shape[1] // 2
    small = cv2.resize(image[: 2 * rows, : 2 * columns], (columns, rows), interpolation=cv2.INTER_AREA)
    return np.asarray(small, np.float32)
