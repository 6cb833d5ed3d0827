"""What is measured in a scan before anything is named: its lines, lattices and blocks."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.chroma import ChromaReading, read_chroma
from moire.grids import BLOCK_SCORE, BlockGrid, find_block_grid
from moire.lattice import Lattice, wrap
from moire.model import Scan
from moire.pairing import find_lattices, half_orders, missing_partners
from moire.patches import Codes
from moire.peaks import Peak, find_candidates, measure_bins
from moire.refinement import polish, refine, with_colours
from moire.samples import code_planes, mixed_plane, rate_aspect
from moire.screens import is_halftone
from moire.spectrum import Spectrum, tile_spectrum

_TILES_AT_MOST = 1200
_CALLED_Z = 3.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Survey:
    """Everything measured in one scan.

    Attributes
    ----------
    scan : Scan
    codes : ndarray, shape (rows, columns, 1 or 3)
        Code values on a 0..255 scale.
    size : int
        Tile side that weights and bins refer to.
    peaks : tuple of Peak
        Lines that keep their phase.
    lattices : tuple of Lattice
        Those of printed screens.
    chroma : tuple of (ChromaReading, ChromaReading)
        Of each lattice's two lines, where a block codec halved the chroma; else empty.
    blocks : BlockGrid or None
    """

    scan: Scan
    codes: Codes
    size: int
    peaks: tuple[Peak, ...]
    lattices: tuple[Lattice, ...]
    chroma: tuple[tuple[ChromaReading, ChromaReading], ...]
    blocks: BlockGrid | None

    @property
    def jpeg(self) -> bool:
        """Whether the pixels went through a block codec."""
        return self.scan.jpeg or self.blocks is not None


def take_survey(scan: Scan, size: int) -> Survey:
    """Measure a scan in tiles of `size`: lines, then the lattices that they form."""
    codes = code_planes(scan)
    mixed = mixed_plane(codes)
    grid = find_block_grid(mixed)
    blocks = grid if grid.score > BLOCK_SCORE else None
    pitch = max(size // 2, math.isqrt(mixed.size // _TILES_AT_MOST))
    spectrum = tile_spectrum(mixed, size=size, pitch=pitch)
    seen = refine(mixed, find_candidates(spectrum), size=size)
    peaks = tuple(p for p in seen if _credible(p))
    # A partner too weak to stand out by itself counts where a coherent line calls for it, and a
    # screen whose (1, 1) order was seen where its own lines are.
    aspect, jpeg = rate_aspect(scan), scan.jpeg or blocks is not None
    peaks += _called(missing_partners(peaks, size=size, aspect=aspect), mixed, spectrum)
    seen_lattices = find_lattices(peaks, size=size, aspect=aspect, jpeg=jpeg)
    peaks += _called(half_orders(seen_lattices, peaks, size=size), mixed, spectrum)
    peaks = polish(mixed, peaks, size=min(size, 64))
    halved = jpeg and codes.shape[2] == 3
    peaks = _with_chroma(peaks, codes, size) if halved else with_colours(codes, peaks, size=size)
    lattices = find_lattices(peaks, size=size, aspect=aspect, jpeg=jpeg)
    # Print or cloth is asked once, of the strongest: weak inks of a print cannot dominate it.
    if lattices and not is_halftone(lattices[0], lattices, seen, size):
        lattices = ()
    chroma = _read_inks(lattices, codes, size) if halved else ()
    return Survey(
        scan=scan, codes=codes, size=size, peaks=peaks, lattices=lattices, chroma=chroma, blocks=blocks
    )  # fmt: skip


def _with_chroma(peaks: tuple[Peak, ...], codes: Codes, size: int) -> tuple[Peak, ...]:
    """Peaks with the colours that a codec's halved chroma moved elsewhere."""
    if not peaks:
        return ()
    places, weights = np.array([wrap(p.f) for p in peaks]), np.stack([p.weight for p in peaks])
    readings = read_chroma(codes, places, weights, size=size)
    return tuple(replace(p, colour=r.colour) for p, r in zip(peaks, readings, strict=True))


def _called(
    bins: tuple[tuple[int, int], ...], mixed: NDArray[np.float32], spectrum: Spectrum
) -> tuple[Peak, ...]:
    """Coherent lines at bins that others call for."""
    called = tuple(c for c in measure_bins(spectrum, bins) if c.z > _CALLED_Z)
    found = refine(mixed, called, size=spectrum.size)
    return tuple(p for p in found if _credible(p) and p.coherence > 0.9)


def _read_inks(
    lattices: tuple[Lattice, ...], codes: Codes, size: int
) -> tuple[tuple[ChromaReading, ChromaReading], ...]:
    """Chroma of both lines of each lattice, read where JPEG's chroma sampling moved it."""
    if not lattices:
        return ()
    vectors = np.array([k for g in lattices for k in (g.k1, g.k2)])
    weights = np.stack([p.weight for g in lattices for p in (g.first, g.second)])
    readings = read_chroma(codes, vectors, weights, size=size)
    return tuple(zip(readings[::2], readings[1::2], strict=True))


def _credible(peak: Peak) -> bool:
    # A line far above its background is there, even where its phase wanders with the paper.
    in_step = max(peak.coherence, peak.local_coherence) > (0.75 if peak.z > 20 else 0.85)
    return in_step and peak.tiles >= 6 and peak.off_bin < (1.1 if peak.coherence > 0.97 else 0.85)
