"""Naming: the strongest lines of a rate as beats, with their cause in words."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.judging import SAME_CPI, Judged
from moire.originals import Original
from moire.patterns import Pattern
from moire.plans import Beat, Part, Source
from moire.prediction import Capture, Lines
from moire.units import MM_PER_INCH, page_angle

_LISTED, _LISTED_ROSETTES, _BRIEF = 8, 3, 2
_LEAST_LISTED = 0.3
_SLOWEST_CPI = 1e-3


def list_beats(
    judged: Judged, original: Original, capture: Capture, i: int, *, brief: bool = False
) -> tuple[Beat, ...]:
    """The beats of one rate that are worth a word, most visible first.

    `brief` lists the two strongest with the sampling grid alone.
    """
    sampling = judged.by_sampling[i]
    found = _strongest_of(judged, original, capture, i, sampling, _BRIEF if brief else _LISTED)
    if not brief:
        found += _strongest_of(judged, original, capture, i, ~sampling & ~judged.alone, _LISTED_ROSETTES)
    return tuple(sorted(found, key=lambda b: -b.visibility))


def _strongest_of(
    judged: Judged, original: Original, capture: Capture, i: int, wanted: NDArray[np.bool_], count: int
) -> list[Beat]:
    shown = np.where(wanted, judged.visibility[i], 0)
    order = np.argsort(-shown)[: 2 * count]
    rate = (float(capture.rates[i, 0]), float(capture.rates[i, 1]))
    group: list[Beat] = []
    places: list[tuple[float, float]] = []
    for line in order[shown[order] >= _LEAST_LISTED]:
        place = (float(judged.lines.seen_cpi[i, line, 0]), float(judged.lines.seen_cpi[i, line, 1]))
        same = next((j for j, p in enumerate(places) if _together(place, p, rate)), None)
        if same is not None:
            # Lines that fall together add at the worst phase.
            host = group[same]
            group[same] = replace(
                host,
                amplitude=host.amplitude + float(judged.lines.amplitude[i, line]),
                visibility=host.visibility + float(shown[line]),
            )
        elif len(group) < count:
            group.append(name_beat(judged, original, capture, i, int(line)))
            places.append(place)
    return group


def name_beat(judged: Judged, original: Original, capture: Capture, i: int, line: int) -> Beat:
    """One line of one rate as a record."""
    lines = judged.lines
    seen: list[float] = lines.seen_cpi[i, line].tolist()
    rate: list[float] = capture.rates[i].tolist()
    frequency, sigma = math.hypot(*seen), float(judged.sigma_cpi[i, line])
    slow = frequency < _SLOWEST_CPI
    order = (int(lines.order[i, line, 0]), int(lines.order[i, line, 1]))
    source: Source = "sampling" if judged.by_sampling[i, line] else "rosette"
    direction = page_angle(*seen)
    return Beat(
        orders=tuple(Part(pattern=p, orders=(m, n)) for p, m, n in lines.parts[line]),
        rate_order=order,
        capture_order=None
        if capture.grid is None
        else (int(lines.capture_order[i, line, 0]), int(lines.capture_order[i, line, 1])),
        frequency_cpi=frequency,
        frequency_sigma_cpi=sigma,
        period_mm=None if slow else MM_PER_INCH / frequency,
        period_px=None if slow else 1 / math.hypot(seen[0] / rate[0], seen[1] / rate[1]),
        period_mm_range=None
        if slow or sigma >= frequency
        else (MM_PER_INCH / (frequency + sigma), MM_PER_INCH / (frequency - sigma)),
        direction_deg=-((90 - direction) % 180 - 90),
        amplitude=float(lines.amplitude[i, line]),
        visibility=float(judged.visibility[i, line]),
        source=source,
        words=_words(lines, original, capture, i, line),
    )


def _words(lines: Lines, original: Original, capture: Capture, i: int, line: int) -> str:
    def order(pattern: Pattern, m: int, n: int) -> str:
        if pattern.repeat == 1:
            return f"({m},{n}) of {pattern.name}"
        return f"({_share(m, pattern.repeat)},{_share(n, pattern.repeat)}) of {pattern.name}"

    text = " with ".join(order(original.patterns[p], m, n) for p, m, n in lines.parts[line])
    if capture.grid is not None:
        text += _folds(
            lines.capture_order[i, line], " by the master" if capture.derivative else " by the sensor"
        )
    text += _folds(lines.order[i, line], "")
    if lines.image[line].any():
        text += f", image left by {capture.kernel}"
    return text


def _folds(order: NDArray[np.int64], by: str) -> str:
    return f", folded ({int(order[0])},{int(order[1])}){by}" if order.any() else ""


def _share(order: int, repeat: int) -> str:
    divisor = math.gcd(order, repeat)
    return str(order // divisor) if repeat == divisor else f"{order // divisor}/{repeat // divisor}"


def _together(a: tuple[float, float], b: tuple[float, float], rate: tuple[float, float]) -> bool:
    """Whether two lines are one on the sampling grid, either sign."""
    for sign in (1, -1):
        x, y = a[0] - sign * b[0], a[1] - sign * b[1]
        if math.hypot(x - round(x / rate[0]) * rate[0], y - round(y / rate[1]) * rate[1]) < SAME_CPI:
            return True
    return False
