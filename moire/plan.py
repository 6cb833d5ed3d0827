"""Planning: which rate, turn or derivative size shows no beat, and why."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

import moire
from moire.choices import make_choices
from moire.dots import Shape
from moire.errors import BadRequest
from moire.judging import SCALE_SIGMA, judge_lines, strongest
from moire.kernels import Kernel
from moire.model import Examination, Screen, Verdict, Viewing, Weave
from moire.naming import name_beat
from moire.originals import Original, measured_originals, printed_original, woven_original
from moire.plans import Choice, Plan, Reading
from moire.prediction import Capture, predict
from moire.reasons import explain, settling_scan
from moire.reprint import reprint_beats
from moire.rules import Curve, curve_rates, multiple_rates, weigh_rules
from moire.sampling import Optics
from moire.vision import viewing_condition

Pair = tuple[float, float]
KEEPER = (
    "Rescanning means handling and light: defer to the keeper of the original, "
    "and plan one scan rather than trials."
)
# Below this a beat stays unseen even where lens, ink or eye are a little better than assumed.
_MARGIN = 0.5
_SEVERITY: tuple[Verdict, ...] = ("sound", "mendable", "refer", "rescan", "unreadable")


@dataclass(frozen=True, slots=True, kw_only=True)
class Scanning:
    """What the scanner and the software after it do.

    Attributes
    ----------
    optics : Optics
        Lens and aperture, in pixels of the sensor's rate.
    optical : (float, float) or None
        The sensor's own rate, from which the scanner makes the others; None where the sensor
        works at each rate itself.
    master : (float, float) or None
        Rate of a master that software reduces to the rates planned for.
    kernel : str
        With which kernel either is resampled.
    scale_sigma : float
        Standard uncertainty of the scanner's scale, as a share.
    """

    optics: Optics = field(default_factory=Optics)
    optical: Pair | None = None
    master: Pair | None = None
    kernel: Kernel = "opencv-area"
    scale_sigma: float = SCALE_SIGMA


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sweep:
    """Strongest beat over a range of rates: ppi, visibility, and what it is in words."""

    ppi: NDArray[np.float64]
    visibility: NDArray[np.float64]
    words: tuple[str, ...]


def plan(
    source: Sequence[Screen] | Weave | Examination,
    *,
    rates: Sequence[Pair],
    turns: Sequence[float] = (0.0,),
    scanning: Scanning = Scanning(),
    reprint: Pair | None = None,
    viewing: Literal["monitor", "print"] = "monitor",
    shape: Shape = "round",
) -> Plan:
    """Rank ways to scan an original, or to reduce a master, by the beats that they would show.

    Parameters
    ----------
    source : sequence of Screen, Weave or Examination
        The original: given, or as measured in a scan; what one scan leaves open is planned for
        in each reading.
    rates : sequence of (float, float)
        Pixels per inch along x and y to choose from; of derivatives where there is a master.
    turns : sequence of float
        Degrees that the sheet may be turned, counter-clockwise as seen.
    scanning : Scanning
        The scanner, and the reduction if any.
    reprint : (float, float) or None
        Ruling and angle of a second screen through which the scan will be printed.
    viewing : {"monitor", "print"}
        Condition under which visibility is judged; a reprint is judged in the hand.
    shape : str
        Dot shape.

    Returns
    -------
    Plan
        Choices, best first. ``visibility`` counts beats with the sampling grid and the reprint
        only; beats between the printed screens are in the original and listed beside them.

    Raises
    ------
    BadRequest
        If there is nothing to plan for or nothing to choose from.
    """
    originals = _originals(source, shape)
    condition = viewing_condition(viewing)
    captures = _captures(rates, turns, scanning)
    choices: list[Choice] = []
    per_reading: list[list[Choice]] = []
    for original in originals:
        per_reading.append(
            [c for capture in captures for c in _choose(original, capture, condition, scanning, reprint)]
        )
    for same in zip(*per_reading, strict=True):
        choices.append(replace(same[0], doubt=max((c.visibility for c in same[1:]), default=0.0)))
    order = sorted(range(len(choices)), key=lambda i: _rank(choices[i]))
    ranked = tuple(choices[i] for i in order)
    at_best = replace(captures[0], turn_deg=ranked[0].turn_deg)
    curve = _curve(originals[0], at_best, curve_rates(originals[0]), condition, scanning.scale_sigma)
    exact = _curve(originals[0], at_best, multiple_rates(originals[0]), condition, 0.0)
    return Plan(
        software=f"moire {moire.__version__}",
        viewing=condition,
        patterns=originals[0].planned,
        choices=ranked,
        recommended=0,
        why=explain(ranked, originals, curve.free_from, derivative=scanning.master is not None),
        rules=weigh_rules(originals[0], curve, exact),
        free_from_ppi=curve.free_from,
        readings=tuple(
            _reading(o, [own[i] for i in order])
            for o, own in zip(originals[1:], per_reading[1:], strict=True)
        ),
        settle=settling_scan(originals, ranked),
        caution=KEEPER,
    )


def sweep(
    source: Sequence[Screen] | Weave | Examination,
    *,
    ppi: NDArray[np.float64],
    turn_deg: float = 0.0,
    scanning: Scanning = Scanning(),
    viewing: Literal["monitor", "print"] = "monitor",
    shape: Shape = "round",
) -> Sweep:
    """The strongest beat with the sampling grid at each of many rates, for a chart.

    Parameters
    ----------
    source, scanning, viewing, shape
        As for `plan`; the most probable reading is taken.
    ppi : ndarray, shape (n,)
        Rates, the same on both axes.
    turn_deg : float
        The sheet's turn.
    """
    original = _originals(source, shape)[0]
    (capture,) = _captures([(float(r), float(r)) for r in ppi], (turn_deg,), scanning)
    lines = predict(original.patterns, capture)
    judged = judge_lines(
        lines, original, capture, viewing_condition(viewing), scale_sigma=scanning.scale_sigma
    )
    seen, at = strongest(judged, capture.rates)
    words = tuple(name_beat(judged, original, capture, i, int(line)).words for i, line in enumerate(at))
    return Sweep(ppi=ppi, visibility=seen, words=words)


def _originals(source: Sequence[Screen] | Weave | Examination, shape: Shape) -> tuple[Original, ...]:
    if isinstance(source, Examination):
        return measured_originals(source, shape=shape)
    if isinstance(source, Weave):
        return (woven_original(source),)
    return (printed_original(source, shape=shape),)


def _captures(rates: Sequence[Pair], turns: Sequence[float], scanning: Scanning) -> list[Capture]:
    if not rates or not turns:
        raise BadRequest("nothing to choose from: give at least one rate")
    if not all(10 <= r <= 20000 for rate in rates for r in rate):
        raise BadRequest("a rate is out of range: give 10 to 20000 ppi")
    if scanning.optical is not None and scanning.master is not None:
        raise BadRequest(
            "a derivative is made from its master: give the optical rate for scanning, or a master"
        )
    if scanning.master is not None and any(r[a] > scanning.master[a] for r in rates for a in (0, 1)):
        raise BadRequest("a derivative cannot be finer than its master: give a lower rate, or a finer master")
    grid = scanning.master or scanning.optical
    return [
        Capture(
            rates=np.array(rates, float), turn_deg=float(turn), optics=scanning.optics, grid=grid,
            kernel=scanning.kernel, derivative=scanning.master is not None,
        )
        for turn in turns
    ]  # fmt: skip


def _choose(
    original: Original, capture: Capture, condition: Viewing, scanning: Scanning, reprint: Pair | None
) -> tuple[Choice, ...]:
    lines = predict(original.patterns, capture)
    judged = judge_lines(lines, original, capture, condition, scale_sigma=scanning.scale_sigma)
    choices = make_choices(judged, original, capture)
    if reprint is None:
        return choices
    hand = viewing_condition("print")
    out = []
    for i, choice in enumerate(choices):
        more = reprint_beats(judged, original, capture, i, reprint, hand)
        beats = tuple(sorted((*choice.beats, *more), key=lambda b: -b.visibility))
        worst = max((b.visibility for b in more), default=0.0)
        out.append(replace(choice, beats=beats, visibility=max(choice.visibility, worst)))
    return tuple(out)


def _rank(choice: Choice) -> tuple[float, ...]:
    """Beats first; without a visible one detail, margin, verdict, the least turn, the smallest file."""
    worst = max(choice.visibility, choice.doubt)
    severity = _SEVERITY.index(choice.verdict)
    if worst >= 1:
        return (1, severity, worst)
    size = choice.ppi[0] * choice.ppi[1]
    return (0, not choice.keeps_detail, worst >= _MARGIN, severity, abs(choice.turn_deg), size, worst)


def _curve(
    original: Original, capture: Capture, ppi: NDArray[np.float64], condition: Viewing, scale_sigma: float
) -> Curve:
    """Visibility of the strongest beat when sampled directly."""
    capture = replace(capture, rates=np.stack([ppi, ppi], axis=1), grid=None, derivative=False)
    lines = predict(original.patterns, capture)
    judged = judge_lines(lines, original, capture, condition, scale_sigma=scale_sigma)
    return Curve(ppi=ppi, visibility=strongest(judged, capture.rates)[0])


def _reading(original: Original, choices: list[Choice]) -> Reading:
    best = min(range(len(choices)), key=lambda i: _rank(choices[i]))
    return Reading(
        probability=original.probability,
        patterns=original.planned,
        recommended=best,
        ppi=choices[best].ppi,
        turn_deg=choices[best].turn_deg,
        visibility=choices[best].visibility,
    )
