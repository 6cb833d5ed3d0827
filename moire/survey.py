"""What is measured in a scan before anything is named: its lines, lattices and blocks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.banding import Band, find_bands
from moire.blocks import BlockGrid, find_block_grid
from moire.chroma import ChromaReading, read_chroma
from moire.drift import DriftingLine, find_drifting_lines
from moire.lattice import Lattice
from moire.model import Scan
from moire.pairing import find_lattices
from moire.patches import Codes
from moire.peaks import Peak
from moire.samples import code_planes, mixed_plane, rate_aspect
from moire.screens import is_halftone, on_axis
from moire.sighting import View, coloured, look_closer, sight_screens
from moire.spectrum import Spectrum, tile_phasors

# Excess that is worth one robust standard deviation, for a profile's line beside a tile's.
_NAT_OF_Z = 0.35
_BANDS_AT_MOST = 3
_OF_CONTENT = 3.0
# Smaller tiles part too few bins to follow a line by.
_FOLLOWED_TILE = 128
# A local map is good to about a tenth of a bin, and a bent page shears its squares.
_FOLLOWED_COHERENCE, _DRIFT_SLACK = 0.92, 2.5
_STEADY, _LEAST_DRIFT = 0.97, 0.008
_BESIDE_AXIS_DEG, _COARSEST_CPP = 3.0, 0.08


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Survey:
    """Everything measured in one scan.

    Attributes
    ----------
    scan : Scan
    codes : ndarray, shape (rows, columns, 1 or 3)
        Code values on a 0..255 scale.
    mixed : ndarray, shape (rows, columns)
        Mean of the channels.
    size : int
        Tile side that weights and bins refer to.
    spectrum : Spectrum
        Of those tiles.
    peaks : tuple of Peak
        Lines that keep their phase.
    lattices : tuple of Lattice
        Those of printed screens.
    drifts : tuple of float
        Share by which each lattice's frequency changes over the page; 0 where one holds it all.
    chroma : tuple of (ChromaReading, ChromaReading)
        Of each lattice's two lines, where a block codec halved the chroma; else empty.
    blocks : BlockGrid or None
    """

    scan: Scan
    codes: Codes
    mixed: NDArray[np.float32]
    size: int
    spectrum: Spectrum
    peaks: tuple[Peak, ...]
    lattices: tuple[Lattice, ...]
    drifts: tuple[float, ...]
    chroma: tuple[tuple[ChromaReading, ChromaReading], ...]
    blocks: BlockGrid | None

    @property
    def jpeg(self) -> bool:
        """Whether the pixels lie as a block codec left them."""
        return self.scan.jpeg or _in_place(self.blocks)


def take_survey(scan: Scan, size: int) -> Survey:
    """Measure a scan in tiles of `size`: lines, then the lattices that they form."""
    codes = code_planes(scan)
    mixed = mixed_plane(codes)
    blocks = find_block_grid(mixed)
    view = View(size=size, aspect=rate_aspect(scan), jpeg=scan.jpeg or _in_place(blocks))
    sighting = look_closer(sight_screens(codes, mixed, view), codes, mixed, view)
    lattices, peaks, spectrum = sighting.lattices, sighting.peaks, sighting.spectrum
    drifts = (0.0,) * len(lattices)
    hop = size // 2
    grid = (mixed.shape[0] // hop - 1, mixed.shape[1] // hop - 1)
    if size >= _FOLLOWED_TILE and not _is_steady(lattices):
        moving, moved = _follow_screens(spectrum, grid, codes, view)
        if moving:
            lattices, drifts = moving, moved
    chroma = _read_inks(lattices, codes, size) if view.halves_chroma(codes) else ()
    peaks += _band_peaks(find_bands(mixed), mixed, peaks, blocks, size=size, grid=grid)
    return Survey(
        scan=scan, codes=codes, mixed=mixed, size=size, spectrum=spectrum, peaks=peaks,
        lattices=lattices, drifts=drifts, chroma=chroma, blocks=blocks,
    )  # fmt: skip


def _is_steady(lattices: tuple[Lattice, ...]) -> bool:
    """Whether one frequency for the whole page holds the strongest screen in step."""
    return bool(lattices) and min(lattices[0].first.coherence, lattices[0].second.coherence) > _STEADY


def _follow_screens(
    spectrum: Spectrum,
    grid: tuple[int, int],
    codes: Codes,
    view: View,
) -> tuple[tuple[Lattice, ...], tuple[float, ...]]:
    """Screens among lines followed from tile to tile, and how far each drifts."""
    size = spectrum.size
    lines = find_drifting_lines(spectrum, grid)
    peaks = tuple(_followed(line, size) for line in lines)
    if not find_lattices(peaks, size=size, aspect=view.aspect, jpeg=view.jpeg, slack=_DRIFT_SLACK):
        return (), ()
    peaks = coloured(peaks, codes, view)
    lattices = find_lattices(peaks, size=size, aspect=view.aspect, jpeg=view.jpeg, slack=_DRIFT_SLACK)
    if not lattices or not is_halftone(lattices[0], lattices, peaks, size):
        return (), ()
    # Tables, staves and threads lie along the axes and drift as well: there the map proves nothing.
    strongest = lattices[0].k1
    if on_axis(strongest, within_deg=_BESIDE_AXIS_DEG) or np.hypot(*strongest) < _COARSEST_CPP:
        return (), ()
    # A smaller drift leaves a print steady enough to be found in step.
    drift_of = {id(p): line.drift for p, line in zip(peaks, lines, strict=True)}
    drifts = tuple(max(drift_of[id(g.first)], drift_of[id(g.second)]) for g in lattices)
    return (lattices, drifts) if max(drifts) > _LEAST_DRIFT else ((), ())


def _followed(line: DriftingLine, size: int) -> Peak:
    """A drifting line as a peak at its middle frequency."""
    return Peak(
        f=line.f,
        sigma=line.sigma,
        z=line.excess_nat / _NAT_OF_Z,
        excess_nat=line.excess_nat,
        amplitude=line.amplitude,
        coherence=_FOLLOWED_COHERENCE,
        local_coherence=_FOLLOWED_COHERENCE,
        doubled=False,
        tiles=float(line.weight.sum()),
        bin_cpp=1 / size,
        off_bin=0.0,
        colour=np.ones(1),
        weight=line.weight,
    )


def _band_peaks(
    bands: tuple[Band, ...],
    mixed: NDArray[np.float32],
    peaks: tuple[Peak, ...],
    blocks: BlockGrid | None,
    *,
    size: int,
    grid: tuple[int, int],
) -> tuple[Peak, ...]:
    """Faint lines of the whole page as peaks, less those that tiles saw too."""
    weight = np.ones(grid, np.float32)
    out = []
    for band in _sparse(bands):
        f, sigma = np.zeros(2), np.full(2, band.sigma_cpp)
        f[band.axis] = band.f_cpp
        # Where tiles saw lines on this axis already (text, rules, threads), fainter ones are theirs.
        if any(abs(p.f[1 - band.axis]) < 1 / size for p in peaks):
            continue
        if blocks is not None and abs(band.f_cpp * blocks.period_px % 1 - 0.5) > 0.45:
            continue
        # A scanner's line is as strong in flat places as elsewhere; lines of text are not.
        (in_tiles,), _, _ = tile_phasors(mixed, f[None], size=size)
        if abs(in_tiles.mean()) > _OF_CONTENT * band.amplitude:
            continue
        out.append(
            Peak(
                f=f,
                sigma=sigma,
                z=band.excess_nat / _NAT_OF_Z,
                excess_nat=band.excess_nat,
                amplitude=band.amplitude,
                coherence=1.0,
                local_coherence=1.0,
                doubled=False,
                tiles=float(weight.size),
                bin_cpp=1 / size,
                off_bin=0.0,
                colour=np.ones(1),
                weight=weight,
            )
        )
    return tuple(out)


def _sparse(bands: tuple[Band, ...]) -> tuple[Band, ...]:
    """Bands of axes that show only a few: a scanner has one or two periods, a comb is content."""
    return tuple(b for b in bands if sum(o.axis == b.axis for o in bands) <= _BANDS_AT_MOST)


def _in_place(blocks: BlockGrid | None) -> bool:
    return blocks is not None and blocks.period_px == 8


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
