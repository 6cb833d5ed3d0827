"""Cloth whose threads are finer than the sampling grid reaches: they fold, their binding may not."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from moire.bindingfit import BindingFit, WeaveLines, known_weaves, plausible, read_as, z_plane
from moire.spectrallines import SpectralLine
from moire.spectrum import Spectrum

REACH_CPP = 0.5
# Beyond this a usual aperture and lens leave nothing; below it a folded line is no longer coarse.
_FINEST_CPP = 0.88
_BESIDE_AXIS = 0.12
_STRONGEST, _FOLDS_TRIED = 12, 2
# Readings within so many nats of the best are told; odds drawn together as gains are not independent.
_NEAR_NAT, _TEMPER = 12.0, 0.35
# Two scanners' scales differ by about a percent (common practice, no source).
_SAME_SETT = 0.02


def is_beyond_reach(warp: NDArray[np.float64], weft: NDArray[np.float64]) -> bool:
    """Whether either set of threads folds on the grid; frequencies in cycles per pixel."""
    return float(np.abs([warp, weft]).max()) > REACH_CPP


def fit_folded(spectrum: Spectrum, lines: tuple[SpectralLine, ...]) -> tuple[BindingFit, ...]:
    """Readings of the lines as weaves of which one set of threads or both have folded, best first.

    Threads lie nearly along the axes, so those that fold once are seen along the same axis, as
    many cycles short of one a pixel as they have more than none.
    """
    folded = [_folded_along(lines, axis) for axis in (0, 1)]
    best: list[BindingFit] = []
    z = z_plane(spectrum) if any(folded) else np.zeros((0, 0), np.float32)
    for warp, weft in product(*((None, *found) for found in folded)):
        chosen = [line for line in (warp, weft) if line is not None]
        if not chosen:
            continue
        # What folds cannot at the same time be what it looks like.
        seen = tuple(line for line in lines if not any(_same_bin(line, c) for c in chosen))
        for weave in known_weaves():
            if weave.lowest:
                frames = plausible(_frames(weave, warp, weft, seen), spectrum.size, _FINEST_CPP)
                best.extend(read_as(weave, frames, (*chosen, *seen), z))
    beyond = [fit for fit in best if is_beyond_reach(fit.warp, fit.weft)]
    return tuple(sorted(beyond, key=lambda fit: -fit.gain))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rival:
    """One of several readings of a cloth's lines that a single scan cannot tell apart."""

    fit: BindingFit
    probability: float

    def setts(self, ppi: tuple[float, float]) -> tuple[float, float]:
        """Ends and picks per inch."""
        ends, picks = (float(np.hypot(*(f * np.array(ppi)))) for f in (self.fit.warp, self.fit.weft))
        return ends, picks


def weigh(fits: tuple[BindingFit, ...], size: int) -> tuple[Rival, ...]:
    """Readings that differ in their setts by more than a bin of tiles of `size`, most probable first.

    Empty where no reading that folds comes near the best.
    """
    apart: list[BindingFit] = []
    for fit in sorted(fits, key=lambda f: -f.gain):
        if all(np.abs(fit.frame - other.frame).max() * size > 1 for other in apart):
            apart.append(fit)
    near = [fit for fit in apart if fit.gain > apart[0].gain - _NEAR_NAT]
    if not any(is_beyond_reach(fit.warp, fit.weft) for fit in near):
        return ()
    odds = np.exp(_TEMPER * (np.array([fit.gain for fit in near]) - near[0].gain))
    return tuple(Rival(fit=fit, probability=float(p)) for fit, p in zip(near, odds / odds.sum(), strict=True))


def settle_setts(
    rivals: tuple[Rival, ...],
    ppi: tuple[float, float],
    others: tuple[Rival, ...],
    other_ppi: tuple[float, float],
) -> tuple[Rival, ...]:
    """Rivals weighed by the readings of another scan of the same cloth, most probable first.

    What folds looks otherwise at another rate: only the true setts are read in both. Unchanged
    where no setts are.
    """
    odds = []
    for rival in rivals:
        setts = np.array(rival.setts(ppi))
        same = [o for o in others if np.abs(np.array(o.setts(other_ppi)) / setts - 1).max() < _SAME_SETT]
        odds.append(rival.probability * max((o.probability for o in same), default=0.0))
    if not any(odds):
        return rivals
    weighed = [replace(r, probability=p / sum(odds)) for r, p in zip(rivals, odds, strict=True)]
    return tuple(sorted(weighed, key=lambda r: -r.probability))


def _frames(
    weave: WeaveLines, warp: SpectralLine | None, weft: SpectralLine | None, seen: tuple[SpectralLine, ...]
) -> NDArray[np.float64]:
    """Frames of two folded sets, or of one and what each other line makes of the other set."""
    if warp is not None and weft is not None:
        return np.stack([warp.f, weft.f], axis=1)[None]
    known = 0 if warp is not None else 1
    held = warp if warp is not None else weft
    assert held is not None
    out = []
    for order in (*weave.lowest, (1.0 - known, float(known))[::-1]):
        if abs(order[1 - known]) < 1e-6:
            continue
        for line in seen[:_STRONGEST]:
            for sign in (1, -1):
                other = (sign * line.f - order[known] * held.f) / order[1 - known]
                out.append(np.stack([held.f, other] if known == 0 else [other, held.f], axis=1))
    return np.array(out) if out else np.empty((0, 2, 2))


def _folded_along(lines: tuple[SpectralLine, ...], axis: int) -> tuple[SpectralLine, ...]:
    """Strong lines along an axis as what would have folded there."""
    found = []
    for line in lines[:_STRONGEST]:
        along, beside = float(line.f[axis]), float(line.f[1 - axis])
        true = np.eye(2)[axis] - line.f * math.copysign(1, along)
        if abs(beside) < _BESIDE_AXIS * abs(along) and REACH_CPP < true[axis] < _FINEST_CPP:
            found.append(replace(line, f=true))
    return tuple(found[:_FOLDS_TRIED])


def _same_bin(line: SpectralLine, folded: SpectralLine) -> bool:
    gap = np.stack([line.f - folded.f, line.f + folded.f])
    return bool((np.abs(gap - np.rint(gap)).max(axis=1) < 1e-9).any())
