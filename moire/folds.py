"""Whether a lattice is seen where it is printed, or folded there by the sampling grid."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.dots import round_coefficient
from moire.folding import Unfolded, agree, temper, unfold
from moire.lattice import Lattice
from moire.model import Candidate, Ink, Kind, Screen
from moire.patches import cut_patches, patch_phasors, strong_tiles
from moire.screens import SIGNATURES, measure_screen, name_inks
from moire.settling import settle
from moire.survey import Survey
from moire.vision import linear_light

_SETTLED = 0.9
_EDGE_CPP = 0.005
_STRIDE = 5
_FIRST_ORDER = (np.array(1), np.array(0))
_MIDDLE_TONES = (0.08, 0.92)
_NEXT = "a second scan at another ppi, or with the sheet turned by 5 degrees, settles it (--second)"


@dataclass(frozen=True, slots=True, kw_only=True)
class Fold:
    """What a scan, or two, say about a lattice's true frequency."""

    kind: Kind
    settled: bool
    screen: Screen
    candidates: tuple[Candidate, ...]
    words: str


def judge_folds(survey: Survey, inks: Sequence[Ink], second: Survey | None = None) -> tuple[Fold | None, ...]:
    """Weigh the true screens that could be seen as each lattice of one print.

    Parameters
    ----------
    survey : Survey
        Of a scan with a known rate.
    inks : sequence of str
        Ink of each lattice.
    second : Survey or None
        Of another scan of the same original, at another rate or turned.

    Returns
    -------
    tuple of Fold or None
        None for a lattice that no usual print could be.
    """
    ppi = survey.scan.ppi
    if ppi is None:
        return (None,) * len(survey.lattices)
    options = _weigh(survey, ppi, inks)
    proofs = ("",) * len(options)
    if second is not None and second.scan.ppi is not None:
        others = _weigh(second, second.scan.ppi, name_inks(second.lattices, second.chroma))
        options, seen_again, turn = settle(options, others)
        if turn is not None:
            words = f"with a second scan at {second.scan.ppi[0]:g} ppi, turned by {turn:.2f} degrees"
            proofs = tuple(words if seen else "" for seen in seen_again)
    return tuple(
        _judge(o, g, ppi, ink, proof, asked=second is not None) if o else None
        for o, g, ink, proof in zip(options, survey.lattices, inks, proofs, strict=True)
    )


def _weigh(survey: Survey, ppi: tuple[float, float], inks: Sequence[Ink]) -> tuple[tuple[Unfolded, ...], ...]:
    alone = len(survey.lattices) == 1
    sample = linear_light(survey.codes[::_STRIDE, ::_STRIDE])
    contrasts = [_contrast(survey, g, ink, sample) for g, ink in zip(survey.lattices, inks, strict=True)]
    print_of = agree(
        [unfold(g.k1, ppi, contrast=c, alone=alone) for g, c in zip(survey.lattices, contrasts, strict=True)]
    )
    return tuple(temper(options) for options in print_of)


def _judge(
    options: tuple[Unfolded, ...],
    lattice: Lattice,
    ppi: tuple[float, float],
    ink: Ink,
    proof: str,
    *,
    asked: bool,
) -> Fold:
    best = options[0]
    listed = tuple(
        Candidate(ruling_lpi=o.ruling_lpi, angle_deg=o.angle_deg, order=o.order, probability=o.probability)
        for o in options[:5]
        if o.probability > 0.005
    )
    screen = _screen(best, lattice, ppi, ink)
    direct = sum(o.probability for o in options if o.order == (0, 0))
    # At the edge of the grid a line meets its own mirror image: only another scan can tell.
    edge = float(np.abs(np.abs(np.stack([lattice.k1, lattice.k2])) - 0.5).min()) <= _EDGE_CPP
    settled = best.probability >= _SETTLED and (bool(proof) or (best.order == (0, 0) and not edge))
    kind: Kind = "halftone" if best.order == (0, 0) and (settled or direct > 0.6) else "alias"
    if settled and proof:
        order = "not folded" if best.order == (0, 0) else f"folded by order {best.order}"
        words = f"settled {proof}: {best.ruling_lpi:.1f} lpi at {best.angle_deg:.1f} degrees, {order}"
    elif settled:
        words = f"not folded: probability {direct:.3f} by ruling, angle and remaining contrast"
    elif best.order == (0, 0):
        words = f"probably not folded ({direct:.2f}), but one scan cannot rule a fold out; {_NEXT}"
    else:
        words = (
            f"folded: {best.ruling_lpi:.1f} lpi at {best.angle_deg:.1f} degrees by order {best.order} is "
            f"the most probable source ({best.probability:.2f}); {_NEXT}"
        )
    if asked and not proof:
        words += "; the second scan does not show this screen"
    elif asked and not settled:
        words += "; the second scan given does not settle it"
    return Fold(kind=kind, settled=settled, screen=screen, candidates=listed, words=words)


def _screen(best: Unfolded, lattice: Lattice, ppi: tuple[float, float], ink: Ink) -> Screen:
    rate = np.array(ppi)
    k1 = np.array([best.fx_cpi, best.fy_cpi])
    turned = np.array([k1[1], -k1[0]]) / rate
    # The second vector's order is the one that brings it nearest to the first turned by 90 degrees.
    options = [sign * lattice.k2 + np.rint(turned - sign * lattice.k2) for sign in (1, -1)]
    k2 = min(options, key=lambda k: float(np.abs(k - turned).sum()))
    sigma = [float(np.max(peak.sigma * rate)) for peak in (lattice.first, lattice.second)]
    return measure_screen(k1, k2 * rate, (sigma[0], sigma[1]), ink=ink)


def _contrast(survey: Survey, lattice: Lattice, ink: Ink, sample: NDArray[np.float32]) -> float | None:
    """Observed modulation over that of a screen of this tone without loss.

    In the channel that the ink takes most of, or in luma with the ink's share of it; `sample` is
    light from all over the page, whose brightest is paper. None where the tone is so light or dark
    that the expected modulation is itself uncertain.
    """
    codes = survey.codes
    weight = np.minimum(lattice.first.weight, lattice.second.weight)
    tiles = strong_tiles(np.where(weight >= 0.5 * weight.max(), weight, 0))
    patches = linear_light(cut_patches(codes, tiles, size=survey.size))
    # A codec that halved the chroma leaves a coloured ink only its luma to be judged by.
    if survey.chroma:
        if ink == "unknown":
            return None
        luma = np.array([0.2126, 0.7152, 0.0722], np.float32)
        taken = float(luma @ np.array(SIGNATURES[ink], np.float32))
    else:
        luma = np.eye(codes.shape[2], dtype=np.float32)[int(np.argmax(lattice.first.colour))]
        taken = 1.0
    white = max(float(np.percentile(sample @ luma, 99)), 1e-6)
    phasors, tone = patch_phasors((patches @ luma)[..., None], np.stack([lattice.k1, lattice.k2]))
    swing = np.abs(phasors[..., 0]).max(axis=0)
    share = (1 - tone[:, 0] / white) / taken
    middle = (share > _MIDDLE_TONES[0]) & (share < _MIDDLE_TONES[1])
    if middle.sum() < 3:
        return None
    first = [abs(float(round_coefficient(float(tone), *_FIRST_ORDER))) for tone in share[middle]]
    expected = 2 * np.array(first) * white * taken
    return float(np.median(swing[middle] / np.maximum(expected, 1e-6)))
