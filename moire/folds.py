"""Whether a lattice is seen where it is printed, or folded there by the sampling grid."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.folding import Unfolded, agree, unfold
from moire.lattice import Lattice
from moire.model import Candidate, Ink, Kind, Screen
from moire.scanner import srgb_decode
from moire.screens import SIGNATURES, measure_screen
from moire.spectrum import tile_means, tile_phasors

_SETTLED = 0.9
_EDGE_CPP = 0.005
_MIDDLE_TONES = (0.08, 0.92)


@dataclass(frozen=True, slots=True, kw_only=True)
class Fold:
    """What one scan says about a lattice's true frequency."""

    kind: Kind
    settled: bool
    screen: Screen
    candidates: tuple[Candidate, ...]
    words: str


def judge_folds(
    lattices: Sequence[Lattice],
    inks: Sequence[Ink],
    channels: NDArray[np.float32],
    ppi: tuple[float, float],
    *,
    size: int,
    jpeg: bool,
) -> tuple[Fold | None, ...]:
    """Weigh the true screens that could be seen as each lattice of one print.

    None for a lattice that no usual print could be.
    """
    alone = len(lattices) == 1
    # A codec that halved the chroma leaves a coloured ink only its luma to be judged by.
    by_luma = jpeg and channels.shape[2] == 3
    contrasts = [_contrast(g, i, channels, size, by_luma) for g, i in zip(lattices, inks, strict=True)]
    options = agree(
        [unfold(g.k1, ppi, contrast=c, alone=alone) for g, c in zip(lattices, contrasts, strict=True)]
    )
    return tuple(
        _judge(o, g, ppi, ink) if o else None for o, g, ink in zip(options, lattices, inks, strict=True)
    )


def _judge(options: tuple[Unfolded, ...], lattice: Lattice, ppi: tuple[float, float], ink: Ink) -> Fold:
    best = options[0]
    screen = _screen(best, lattice, ppi, ink)
    listed = tuple(
        Candidate(ruling_lpi=o.ruling_lpi, angle_deg=o.angle_deg, order=o.order, probability=o.probability)
        for o in options[:5]
        if o.probability > 0.005
    )
    direct = sum(o.probability for o in options if o.order == (0, 0))
    edge = float(np.abs(np.abs(np.stack([lattice.k1, lattice.k2])) - 0.5).min())
    if best.order == (0, 0) and direct >= _SETTLED and edge > _EDGE_CPP:
        words = f"not folded: probability {direct:.3f} by ruling, angle and remaining contrast"
        return Fold(kind="halftone", settled=True, screen=screen, candidates=listed, words=words)
    if best.order == (0, 0):
        kind: Kind = "halftone" if direct > 0.6 else "alias"
        words = f"probably not folded ({direct:.2f}), but one scan cannot rule a fold out"
        return Fold(kind=kind, settled=False, screen=screen, candidates=listed, words=words)
    words = (
        f"folded: {best.ruling_lpi:.1f} lpi at {best.angle_deg:.1f} degrees by order {best.order} is the "
        f"most probable source ({best.probability:.2f}); a second scan at another ppi settles it"
    )
    return Fold(kind="alias", settled=False, screen=screen, candidates=listed, words=words)


def _screen(best: Unfolded, lattice: Lattice, ppi: tuple[float, float], ink: Ink) -> Screen:
    rate = np.array(ppi)
    k1 = np.array([best.fx_cpi, best.fy_cpi])
    turned = np.array([k1[1], -k1[0]]) / rate
    # The second vector's order is the one that brings it nearest to the first turned by 90 degrees.
    options = [sign * lattice.k2 + np.rint(turned - sign * lattice.k2) for sign in (1, -1)]
    k2 = min(options, key=lambda k: float(np.abs(k - turned).sum()))
    sigma = [float(np.max(peak.sigma * rate)) for peak in (lattice.first, lattice.second)]
    return measure_screen(k1, k2 * rate, (sigma[0], sigma[1]), ink=ink)


def _contrast(
    lattice: Lattice, ink: Ink, channels: NDArray[np.float32], size: int, by_luma: bool
) -> float | None:
    """Observed modulation over that of a screen of this tone without loss.

    In the channel that the ink takes most of, or in luma with the ink's share of it. None where
    the tone is so light or dark that the expected modulation is itself uncertain.
    """
    if by_luma:
        if ink == "unknown":
            return None
        luma = np.array([0.2126, 0.7152, 0.0722], np.float32)
        taken = float(luma @ np.array(SIGNATURES[ink], np.float32))
        plane = srgb_decode(channels / 255).astype(np.float32) @ luma
    else:
        channel, taken = int(np.argmax(lattice.first.colour)), 1.0
        plane = srgb_decode(channels[..., channel] / 255).astype(np.float32)
    plane = plane[..., None]
    phasors, _, _ = tile_phasors(plane, np.stack([lattice.k1, lattice.k2]), size=size)
    tone = tile_means(plane, size=size)[..., 0]
    white = max(float(np.percentile(plane, 99)), 1e-6)
    swing = np.abs(phasors[..., 0]).max(axis=0)
    weight = np.minimum(lattice.first.weight, lattice.second.weight)
    strong = weight >= max(0.5 * float(weight.max()), 1e-6)
    share = (1 - tone[strong] / white) / taken
    middle = (share > _MIDDLE_TONES[0]) & (share < _MIDDLE_TONES[1])
    if middle.sum() < 3:
        return None
    expected = 2 * _disc_coefficient(share[middle]) * white * taken
    return float(np.median(swing[strong][middle] / np.maximum(expected, 1e-6)))


def _disc_coefficient(share: NDArray[np.floating]) -> NDArray[np.float64]:
    """First Fourier coefficient r J1(2 pi r) of a Euclidean dot of a given area share."""
    from scipy.special import j1

    r = np.sqrt(np.minimum(share, 1 - share) / math.pi)
    return np.asarray(r * j1(2 * np.pi * r))
