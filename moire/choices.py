"""Choices: predicted lines judged by the eye, named, and given the verdict of an examination."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.model import Finding, Kind, Line, Verdict, Viewing
from moire.originals import Original
from moire.patterns import Pattern
from moire.plans import Beat, Choice, Part, Source
from moire.prediction import Capture, Lines
from moire.units import MM_PER_INCH, page_angle
from moire.verdict import judge
from moire.vision import contrast_sensitivities, cycles_per_degree

# Scanners keep their scale to about a thousandth (common practice, no source).
SCALE_SIGMA = 0.001
_LISTED, _LISTED_ROSETTES = 8, 3
_LEAST_LISTED = 0.3
_EYE_PEAK_CPD = 3.05
_SAME_CPI = 0.02
_SLOWEST_CPI = 1e-3

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judged:
    """Predicted lines with what the eye makes of them, arrays of shape (rates, lines)."""

    lines: Lines
    sigma_cpi: Array
    visibility: Array
    by_sampling: NDArray[np.bool_]


def judge_lines(
    lines: Lines, original: Original, capture: Capture, viewing: Viewing, *, scale_sigma: float = SCALE_SIGMA
) -> Judged:
    """Visibility of each line at each rate, the worst within two sigma of its frequency."""
    folded = lines.true_cpi[None] - lines.seen_cpi
    own = np.array([_sigma(part, original.patterns) for part in lines.parts])
    sigma = np.hypot(own[None], scale_sigma * np.hypot(folded[..., 0], folded[..., 1]))
    if viewing.condition == "print":
        size = np.hypot(lines.seen_cpi[..., 0], lines.seen_cpi[..., 1])
        per_mm, spread = size / MM_PER_INCH, sigma / MM_PER_INCH
    else:
        shown = viewing.monitor_ppi / capture.rates[:, None, :]
        seen = lines.seen_cpi * shown
        per_mm = np.hypot(seen[..., 0], seen[..., 1]) / MM_PER_INCH
        spread = sigma * shown.max(axis=-1) / MM_PER_INCH
    degree = cycles_per_degree(1.0, viewing.distance_mm)
    low, high = (per_mm - 2 * spread) * degree, (per_mm + 2 * spread) * degree
    sensitivity = contrast_sensitivities(np.clip(_EYE_PEAK_CPD, low, high))
    # A line and its own mirror image may fold together: at the worst phase they add.
    twice = 2 * lines.seen_cpi
    off = twice - np.rint(twice / capture.rates[:, None, :]) * capture.rates[:, None, :]
    swing = lines.amplitude * np.where(np.hypot(off[..., 0], off[..., 1]) < _SAME_CPI, 2, 1)
    modulation = np.minimum(1, 3 * swing / (lines.mean + 16))
    by_sampling = (lines.order != 0).any(axis=-1) | (lines.capture_order != 0).any(axis=-1)
    by_sampling |= (lines.image != 0).any(axis=-1)[None]
    return Judged(
        lines=replace(lines, amplitude=swing),
        sigma_cpi=sigma,
        visibility=modulation * sensitivity,
        by_sampling=by_sampling,
    )


def make_choices(judged: Judged, original: Original, capture: Capture) -> tuple[Choice, ...]:
    """One choice for each rate of the capture."""
    lines = judged.lines
    alone = np.array([len(part) == 1 for part in lines.parts])
    natural = np.where(judged.by_sampling, 0, judged.visibility).max(axis=1, initial=0.0)
    detail = 2.0 if original.is_cloth else 1.0
    out = []
    for i, rate in enumerate(capture.rates):
        beats = list_beats(judged, original, capture, i, alone)
        seen = max((b.visibility for b in beats if b.source == "sampling"), default=0.0)
        out.append(
            Choice(
                ppi=(float(rate[0]), float(rate[1])),
                turn_deg=capture.turn_deg,
                master_ppi=capture.grid if capture.derivative else None,
                kernel=capture.kernel if capture.grid is not None else None,
                beats=beats,
                visibility=seen,
                original_visibility=float(natural[i]),
                doubt=0.0,
                keeps_detail=bool(rate.min() >= detail * original.finest_lpi),
                verdict=_verdict(judged, original, capture, i),
            )
        )
    return tuple(out)


def strongest(judged: Judged) -> tuple[Array, NDArray[np.intp]]:
    """Visibility of the strongest beat with the sampling grid at each rate, and which line it is."""
    beats = np.where(judged.by_sampling, judged.visibility, 0)
    at = beats.argmax(axis=1)
    return beats[np.arange(len(beats)), at], at


def list_beats(
    judged: Judged, original: Original, capture: Capture, i: int, alone: NDArray[np.bool_]
) -> tuple[Beat, ...]:
    """The beats of one rate that are worth a word, most visible first."""
    found: list[Beat] = []
    sampling = judged.by_sampling[i]
    for wanted, count in ((sampling, _LISTED), (~sampling & ~alone, _LISTED_ROSETTES)):
        shown = np.where(wanted, judged.visibility[i], 0)
        order = np.argsort(-shown)[: 2 * count]
        group: list[Beat] = []
        places: list[Array] = []
        for line in order[shown[order] >= _LEAST_LISTED]:
            beat = name_beat(judged, original, capture, i, int(line))
            place = judged.lines.seen_cpi[i, line]
            same = [j for j, p in enumerate(places) if _together(place, p, capture.rates[i])]
            if same:
                # Lines that fall together add at the worst phase.
                host = group[same[0]]
                group[same[0]] = replace(
                    host,
                    amplitude=host.amplitude + beat.amplitude,
                    visibility=host.visibility + beat.visibility,
                )
            elif len(group) < count:
                group.append(beat)
                places.append(place)
        found += group
    return tuple(sorted(found, key=lambda b: -b.visibility))


def name_beat(judged: Judged, original: Original, capture: Capture, i: int, line: int) -> Beat:
    """One line of one rate as a record."""
    lines = judged.lines
    seen, rate = lines.seen_cpi[i, line], capture.rates[i]
    frequency, sigma = float(np.hypot(*seen)), float(judged.sigma_cpi[i, line])
    slow = frequency < _SLOWEST_CPI
    order = (int(lines.order[i, line, 0]), int(lines.order[i, line, 1]))
    source: Source = "sampling" if judged.by_sampling[i, line] else "rosette"
    direction = page_angle(float(seen[0]), float(seen[1]))
    return Beat(
        orders=tuple(Part(pattern=p, orders=(m, n)) for p, m, n in lines.parts[line]),
        rate_order=order,
        capture_order=None
        if capture.grid is None
        else (int(lines.capture_order[i, line, 0]), int(lines.capture_order[i, line, 1])),
        frequency_cpi=frequency,
        frequency_sigma_cpi=sigma,
        period_mm=None if slow else MM_PER_INCH / frequency,
        period_px=None if slow else float(1 / np.hypot(*(seen / rate))),
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
            lines.capture_order[i, line], "the master's grid" if capture.derivative else "the sensor"
        )
    text += _folds(lines.order[i, line], "the grid")
    if lines.image[line].any():
        text += f", an image that {capture.kernel} leaves"
    return text


def _folds(order: NDArray[np.int64], by: str) -> str:
    if not order.any():
        return ""
    return f", folded ({int(order[0])},{int(order[1])}) by {by}"


def _share(order: int, repeat: int) -> str:
    divisor = math.gcd(order, repeat)
    return str(order // divisor) if repeat == divisor else f"{order // divisor}/{repeat // divisor}"


def _together(a: Array, b: Array, rate: Array) -> bool:
    apart = (d - np.rint(d / rate) * rate for d in (a - b, a + b))
    return any(float(np.hypot(*d)) < _SAME_CPI for d in apart)


def _sigma(parts: Sequence[tuple[int, int, int]], patterns: Sequence[Pattern]) -> float:
    """Standard uncertainty of a line's frequency from its patterns', cycles per inch."""
    return math.sqrt(
        sum((math.hypot(m, n) / patterns[p].repeat * patterns[p].sigma_cpi) ** 2 for p, m, n in parts)
    )


def _verdict(judged: Judged, original: Original, capture: Capture, i: int) -> Verdict:
    """What an examination of the scan would say of these lines."""
    lines, seen = judged.lines, judged.visibility[i]
    findings = []
    groups: dict[tuple[str, int], list[int]] = {}
    for line, parts in enumerate(lines.parts):
        if seen[line] < 1:
            continue
        if lines.image[line].any():
            key = ("unexplained", 0)
        else:
            key = ("pattern", parts[0][0]) if len(parts) == 1 else ("rosette", 0)
        groups.setdefault(key, []).append(line)
    for (what, index), members in groups.items():
        kind: Kind = "unexplained" if what == "unexplained" else "rosette"
        listed: list[Line] = []
        if what == "pattern":
            pattern = original.patterns[index]
            basic = {(pattern.repeat, 0): (1, 0), (0, pattern.repeat): (0, 1)}
            kind = "halftone" if pattern.is_ink else "weave"
            for line in members:
                order = basic.get(lines.parts[line][0][1:])
                if order is None or not judged.by_sampling[i, line]:
                    continue
                kind = "alias"
                f = lines.seen_cpi[i, line] / capture.rates[i]
                swing = float(lines.amplitude[i, line])
                listed.append(
                    Line(
                        fx_cpp=float(f[0]),
                        fy_cpp=float(f[1]),
                        sigma_cpp=0.0,
                        amplitude=swing,
                        snr_db=0.0,
                        order=order,
                    )
                )
        findings.append(
            Finding(
                kind=kind, confidence=1.0, visibility=float(seen[members].max()), coverage=1.0, regions=(),
                lines=tuple(listed), period_px=0.0,
            )
        )  # fmt: skip
    return judge(tuple(findings))[0]
