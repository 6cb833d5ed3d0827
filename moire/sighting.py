"""Coherent lines of a picture and the screens that they form: over a page, and over a part of it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.chroma import read_chroma
from moire.lattice import Lattice, grid_distance, wrap
from moire.pairing import find_lattices, half_orders, missing_partners
from moire.patches import Codes
from moire.peaks import Peak, find_candidates, measure_bins
from moire.refinement import polish, refine, with_colours
from moire.screens import is_halftone
from moire.spectrum import Spectrum, tile_spectrum

_TILES_AT_MOST = 600
_CALLED_Z = 3.0
# Below this share of the page a picture is looked at by itself, in at least so many tile sides.
_PART, _PART_TILES = 0.25, 2.5
_CARRIES = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class View:
    """How a picture is looked at.

    Attributes
    ----------
    size : int
        Tile side, pixels.
    aspect : (float, float)
        ppi of each axis over a common rate.
    jpeg : bool
        Whether the pixels lie as a block codec left them.
    """

    size: int
    aspect: tuple[float, float]
    jpeg: bool

    def halves_chroma(self, codes: Codes) -> bool:
        """Whether a codec is taken to have halved the chroma of these codes."""
        return self.jpeg and codes.shape[2] == 3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sighting:
    """Lines that keep their phase, and the lattices of printed screens among them."""

    spectrum: Spectrum
    peaks: tuple[Peak, ...]
    lattices: tuple[Lattice, ...]


def sight_screens(codes: Codes, mixed: NDArray[np.float32], view: View) -> Sighting:
    """Lines and screens of a picture.

    Parameters
    ----------
    codes : ndarray, shape (rows, columns, channels)
        Code values on a 0..255 scale.
    mixed : ndarray, shape (rows, columns)
        Mean of the channels.
    view : View
    """
    size, aspect, jpeg = view.size, view.aspect, view.jpeg
    pitch = max(size // 2, math.isqrt(mixed.size // _TILES_AT_MOST))
    spectrum = tile_spectrum(mixed, size=size, pitch=pitch)
    seen = refine(mixed, find_candidates(spectrum), size=size)
    peaks = tuple(p for p in seen if _credible(p))
    # A partner too weak to stand out by itself counts where a coherent line calls for it, and a
    # screen whose (1, 1) order was seen where its own lines are.
    peaks += _called(missing_partners(peaks, size=size, aspect=aspect), mixed, spectrum)
    seen_lattices = find_lattices(peaks, size=size, aspect=aspect, jpeg=jpeg)
    peaks += _called(half_orders(seen_lattices, peaks, size=size), mixed, spectrum)
    peaks = polish(mixed, peaks, size=min(size, 64))
    peaks = coloured(peaks, codes, view)
    lattices = find_lattices(peaks, size=size, aspect=aspect, jpeg=jpeg)
    # Print or cloth is asked once, of the strongest: weak inks of a print cannot dominate it.
    if lattices and not is_halftone(lattices[0], lattices, seen, size):
        lattices = ()
    return Sighting(spectrum=spectrum, peaks=peaks, lattices=lattices)


def look_closer(whole: Sighting, codes: Codes, mixed: NDArray[np.float32], view: View) -> Sighting:
    """The same, with the screens of a small part of a page sighted there, where no text is around.

    Parameters
    ----------
    whole : Sighting
        Of the page.
    codes, mixed, view
        As in `sight_screens`.
    """
    if not whole.lattices:
        return whole
    hop = view.size // 2
    grid = whole.lattices[0].first.weight
    part = _part(grid, math.ceil(2 * _PART_TILES) - 1)
    if part is None:
        return whole
    rows, columns = part
    pixels = np.s_[rows.start * hop : (rows.stop + 1) * hop, columns.start * hop : (columns.stop + 1) * hop]
    closer = sight_screens(codes[pixels], mixed[pixels], view)
    if len(closer.lattices) <= len(whole.lattices):
        return whole

    placed: dict[int, Peak] = {}
    for peak in (*closer.peaks, *(p for g in closer.lattices for p in (g.first, g.second))):
        weight = np.zeros_like(grid)
        weight[rows, columns] = peak.weight
        placed[id(peak)] = replace(peak, weight=weight)
    others = (p for p in whole.peaks if all(grid_distance(p.f, q.f) > 0.5 / view.size for q in closer.peaks))
    lattices = (replace(g, first=placed[id(g.first)], second=placed[id(g.second)]) for g in closer.lattices)
    peaks = (*(placed[id(p)] for p in closer.peaks), *others)
    return Sighting(spectrum=whole.spectrum, peaks=peaks, lattices=tuple(lattices))


def _part(weight: NDArray[np.float32], least: int) -> tuple[slice, slice] | None:
    """Rows and columns of tiles around the largest part that carries a line, if it is small."""
    import cv2

    present = (weight > _CARRIES).astype(np.uint8)
    _, _, stats, _ = cv2.connectedComponentsWithStats(present, connectivity=8)
    if len(stats) < 2:
        return None
    x, y, w, h, _ = max(stats[1:].tolist(), key=lambda s: s[4])
    out = []
    for start, length, limit in ((y, h, weight.shape[0]), (x, w, weight.shape[1])):
        grown = min(limit, max(length, least))
        first = max(0, min(start - (grown - length) // 2, limit - grown))
        out.append(slice(first, first + grown))
    rows, columns = out
    area = (rows.stop - rows.start) * (columns.stop - columns.start)
    return (rows, columns) if area < _PART * weight.size else None


def coloured(peaks: tuple[Peak, ...], codes: Codes, view: View) -> tuple[Peak, ...]:
    """Peaks with their colours, read elsewhere where a codec's halved chroma moved them."""
    if not view.halves_chroma(codes) or not peaks:
        return with_colours(codes, peaks, size=view.size)
    places, weights = np.array([wrap(p.f) for p in peaks]), np.stack([p.weight for p in peaks])
    readings = read_chroma(codes, places, weights, size=view.size)
    return tuple(replace(p, colour=r.colour) for p, r in zip(peaks, readings, strict=True))


def _called(
    bins: tuple[tuple[int, int], ...], mixed: NDArray[np.float32], spectrum: Spectrum
) -> tuple[Peak, ...]:
    """Coherent lines at bins that others call for."""
    called = tuple(c for c in measure_bins(spectrum, bins) if c.z > _CALLED_Z)
    found = refine(mixed, called, size=spectrum.size)
    return tuple(p for p in found if _credible(p) and p.coherence > 0.9)


def _credible(peak: Peak) -> bool:
    # A line far above its background is there, even where its phase wanders with the paper.
    in_step = max(peak.coherence, peak.local_coherence) > (0.75 if peak.z > 20 else 0.85)
    return in_step and peak.tiles >= 6 and peak.off_bin < (1.1 if peak.coherence > 0.97 else 0.85)
