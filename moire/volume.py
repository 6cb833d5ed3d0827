"""The same screen on many leaves of one volume: recognised, and measured together.

A volume is the leaves of one folder. A ruling belongs to the print and stays from leaf to leaf;
an angle turns with every leaf on the platen, but all inks of a leaf turn together.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

import moire
from moire.model import Ink, Recipe, Removal
from moire.outcome import Outcome
from moire.units import fold_angle, lpi_to_lpcm, page_vector

LEAVES_AT_LEAST = 3
# Leaves of one scanner agree on a ruling far better than this; another edition's do not.
_SAME_RULING = 0.01
_SAME_ANGLE_DEG = 14.0
# Measured: a remedy loses nothing to a turn of 1 degree, 2 dB to 0.5 % of the ruling.
_ONE_RECIPE_TURN_DEG = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class SharedScreen:
    """One ink's screen over the leaves of a volume.

    ``angle_deg`` is the mean over the leaves as they lay, ``angle_deg_sigma`` what is left of
    it once each leaf's own turn is taken out, ``leaves`` on how many it was measured, and
    ``ruling_lpi_sigma_one`` the median uncertainty of one leaf alone.
    """

    ink: Ink
    shape: Literal["dot", "line"]
    ruling_lpi: float
    ruling_lpi_sigma: float
    ruling_lpi_sigma_one: float
    ruling_lpcm: float
    angle_deg: float
    angle_deg_sigma: float
    leaves: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Volume:
    """Leaves of one folder and rate that share their screens.

    ``turn_deg`` is the standard deviation of the leaves' turns, ``settled`` the paths of leaves
    whose folded screen could not be told by itself but fits the volume's, ``recipe`` a remedy
    for all leaves, or None where they are turned too differently for one.
    """

    folder: str
    ppi: tuple[float, float]
    leaves: int
    screens: tuple[SharedScreen, ...]
    turn_deg: float
    settled: tuple[str, ...]
    recipe: Recipe | None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    """One screen on one leaf."""

    leaf: int
    ink: Ink
    shape: Literal["dot", "line"]
    ruling: float
    ruling_sigma: float
    angle: float
    angle_sigma: float

    @property
    def period_deg(self) -> float:
        return 90.0 if self.shape == "dot" else 180.0


def find_volumes(outcomes: Iterable[Outcome]) -> Iterator[Volume]:
    """Volumes among the outcomes of a batch.

    Parameters
    ----------
    outcomes : iterable of Outcome
        Sorted by path, so that a folder can be let go once it has passed.

    Yields
    ------
    Volume
        Of each folder in which at least three leaves share a screen.
    """
    open_folders: dict[str, dict[tuple[float, float], list[Outcome]]] = {}
    for outcome in outcomes:
        for folder in [f for f in open_folders if not outcome.path.startswith(f + "/")]:
            yield from _of_folder(folder, open_folders.pop(folder))
        if outcome.ppi is not None and any(f.screen is not None for f in outcome.findings):
            folder = outcome.path.rpartition("/")[0]
            open_folders.setdefault(folder, {}).setdefault(outcome.ppi, []).append(outcome)
    for folder, leaves in open_folders.items():
        yield from _of_folder(folder, leaves)


def volume_note(volume: Volume) -> str:
    """A volume in one sentence."""
    screens = "; ".join(
        f"{s.ink} {_with_sigma(s.ruling_lpi, s.ruling_lpi_sigma)} lines/inch ({s.ruling_lpcm:.2f}/cm) "
        f"on {s.leaves} leaves"
        for s in volume.screens
    )
    name = volume.folder.rpartition("/")[2]
    more = f", which also settles {len(volume.settled)} folded leaves" if volume.settled else ""
    remedy = "One recipe serves them all." if volume.recipe else "Their turns differ too much for one recipe."
    return f"{name}: the same print on {volume.leaves} leaves: {screens}{more}. {remedy}"


def _with_sigma(value: float, sigma: float) -> str:
    digits = 2 if sigma <= 0 else min(4, max(0, 1 - math.floor(math.log10(sigma))))
    return f"{value:.{digits}f} ± {sigma:.{digits}f}"


def _of_folder(folder: str, by_rate: dict[tuple[float, float], list[Outcome]]) -> Iterator[Volume]:
    for ppi, leaves in by_rate.items():
        seen = [s for i, leaf in enumerate(leaves) for s in _screens_of(i, leaf)]
        groups = [g for g in _alike(seen) if len({s.leaf for s in g}) >= LEAVES_AT_LEAST]
        if not groups:
            continue
        angles, sigmas, turns = _without_turns(groups)
        screens = tuple(_shared(g, a, s) for g, a, s in zip(groups, angles, sigmas, strict=True))
        turn = float(np.std(list(turns.values())))
        yield Volume(
            folder=folder,
            ppi=ppi,
            leaves=len(turns),
            screens=screens,
            turn_deg=turn,
            settled=tuple(leaf.path for leaf in leaves if _fits(leaf, screens)),
            recipe=_recipe(screens, ppi) if turn <= _ONE_RECIPE_TURN_DEG else None,
        )


def _screens_of(leaf: int, outcome: Outcome) -> Iterator[_Seen]:
    for finding in outcome.findings:
        s = finding.screen
        # A screen that drifts over its page has no one ruling to share.
        if s is not None and finding.settled and finding.kind == "halftone" and not finding.drift:
            yield _Seen(
                leaf=leaf, ink=s.ink, shape=s.shape, ruling=s.ruling_lpi, angle=s.angle_deg,
                ruling_sigma=max(s.ruling_lpi_sigma, 1e-4), angle_sigma=max(s.angle_deg_sigma, 1e-4),
            )  # fmt: skip


def _alike(seen: Sequence[_Seen]) -> list[list[_Seen]]:
    """Groups of one ink, shape, ruling and about one angle, largest first."""
    rest = sorted(seen, key=lambda s: s.ruling_sigma)
    groups = []
    while rest:
        first = rest[0]
        group = [
            s
            for s in rest
            if (s.ink, s.shape) == (first.ink, first.shape)
            and abs(s.ruling / first.ruling - 1) <= _SAME_RULING
            and abs(_turn(s.angle, first.angle, first.period_deg)) <= _SAME_ANGLE_DEG
        ]
        rest = [s for s in rest if not any(s is g for g in group)]
        groups.append(group)
    return sorted(groups, key=len, reverse=True)


def _turn(angle: float, reference: float, period: float) -> float:
    """Signed turn from a reference, in (-period/2, period/2]."""
    return fold_angle(angle - reference + period / 2, period) - period / 2


def _without_turns(groups: Sequence[Sequence[_Seen]]) -> tuple[list[float], list[float], dict[int, float]]:
    """Angles of screens and turns of leaves by alternating weighted means; the turns' mean is 0."""
    first = [g[0].angle for g in groups]
    gaps = [
        (s.leaf, k, _turn(s.angle, first[k], s.period_deg), s.angle_sigma**-2)
        for k, g in enumerate(groups)
        for s in g
    ]
    leaf, screen = (np.array([gap[i] for gap in gaps], int) for i in (0, 1))
    value, weight = (np.array([gap[i] for gap in gaps]) for i in (2, 3))
    names = np.unique(leaf)
    at = np.searchsorted(names, leaf)
    offset, turn = np.zeros(len(groups)), np.zeros(len(names))
    for _ in range(50):
        turn = np.bincount(at, weight * (value - offset[screen])) / np.bincount(at, weight)
        turn -= turn.mean()
        offset = np.bincount(screen, weight * (value - turn[at])) / np.bincount(screen, weight)
    left = value - offset[screen] - turn[at]
    sigmas = []
    for k in range(len(groups)):
        mine = screen == k
        scatter = float(np.sqrt(np.average(left[mine] ** 2, weights=weight[mine]) / mine.sum()))
        sigmas.append(max(scatter, float(weight[mine].sum() ** -0.5)))
    angles = [fold_angle(first[k] + float(offset[k]), g[0].period_deg) for k, g in enumerate(groups)]
    return angles, sigmas, dict(zip(names.tolist(), turn.tolist(), strict=True))


def _shared(group: Sequence[_Seen], angle: float, angle_sigma: float) -> SharedScreen:
    rulings = np.array([s.ruling for s in group])
    weights = np.array([s.ruling_sigma for s in group]) ** -2.0
    mean = float(np.average(rulings, weights=weights))
    # Where leaves scatter more than their own uncertainty says, the scatter counts (Birge ratio).
    birge = math.sqrt(float(np.sum(weights * (rulings - mean) ** 2)) / max(1, len(group) - 1))
    return SharedScreen(
        ink=group[0].ink,
        shape=group[0].shape,
        ruling_lpi=mean,
        ruling_lpi_sigma=float(weights.sum() ** -0.5) * max(1.0, birge),
        ruling_lpi_sigma_one=float(np.median([s.ruling_sigma for s in group])),
        ruling_lpcm=lpi_to_lpcm(mean),
        angle_deg=angle,
        angle_deg_sigma=angle_sigma,
        leaves=len({s.leaf for s in group}),
    )


def _fits(leaf: Outcome, screens: Sequence[SharedScreen]) -> bool:
    """Whether a leaf has an unsettled screen of which one explanation is the volume's."""
    return any(
        abs(candidate.ruling_lpi / screen.ruling_lpi - 1) <= _SAME_RULING
        for finding in leaf.findings
        if not finding.settled
        for candidate in finding.candidates
        for screen in screens
    )


def _recipe(screens: Sequence[SharedScreen], ppi: tuple[float, float]) -> Recipe:
    removals = []
    for s in screens:
        if s.shape != "dot":
            continue
        vectors = tuple(
            (fx / ppi[0], fy / ppi[1])
            for fx, fy in (
                page_vector(s.ruling_lpi, s.angle_deg),
                page_vector(s.ruling_lpi, s.angle_deg + 90),
            )
        )
        removals.append(Removal(kind="halftone", method="descreen", vectors_cpp=vectors, ink=s.ink))
    return Recipe(
        software=f"moire {moire.__version__}",
        ppi=ppi,
        strength=1.0,
        quick=False,
        to_ppi=None,
        removals=tuple(removals),
    )
