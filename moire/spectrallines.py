"""Lines of a tiled spectrum placed to a fraction of a bin, whether or not they keep step over the page."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.peaks import Candidate, find_candidates
from moire.spectrum import Spectrum

FINEST_LINE_CPP = 0.45


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SpectralLine:
    """A line with its place to a fraction of a bin: ``(fx, fy)`` cycles per pixel, excess in nat.

    ``share`` weighs it by its level among the others.
    """

    f: NDArray[np.float64]
    z: float
    excess_nat: float
    level_nat: float
    share: float = 1.0

    @property
    def weight(self) -> float:
        """What the line counts for in a reading."""
        return min(max(self.excess_nat / 3, 0.2), 1.5) * self.share


def find_lines(spectrum: Spectrum) -> tuple[SpectralLine, ...]:
    """Lines of a tiled spectrum, in step over the page or not, strongest first."""
    found = []
    for c in find_candidates(spectrum):
        f = _sub_bin(spectrum, c)
        if np.hypot(*f) > FINEST_LINE_CPP:
            continue
        level = float(spectrum.mean[c.ky % spectrum.size, c.kx % spectrum.size])
        found.append(SpectralLine(f=f, z=c.z, excess_nat=c.excess_nat, level_nat=level))
    found.sort(key=lambda line: -line.level_nat)
    # A line a thousandth as strong as the strongest says little about the cloth.
    return tuple(
        replace(line, share=float(np.clip(1 - (found[0].level_nat - line.level_nat) / 9, 0.2, 1)))
        for line in found
    )


def _sub_bin(spectrum: Spectrum, c: Candidate) -> NDArray[np.float64]:
    n = spectrum.size
    plane = spectrum.mean
    shift = []
    for dy, dx in ((0, 1), (1, 0)):
        a, b, d = (float(plane[(c.ky + s * dy) % n, (c.kx + s * dx) % n]) for s in (-1, 0, 1))
        curve = a - 2 * b + d
        shift.append(float(np.clip(0.5 * (a - d) / curve, -0.5, 0.5)) if curve < 0 else 0.0)
    return np.array([c.kx + shift[0], c.ky + shift[1]]) / n
