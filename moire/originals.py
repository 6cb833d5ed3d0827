"""Originals to plan for: given or measured screens and cloth, as patterns with uncertainty."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from moire.bindings import parse_binding
from moire.dots import Shape
from moire.errors import BadRequest
from moire.model import Examination, Finding, Screen, Weave, WeavePattern
from moire.patterns import Pattern, cloth_pattern, ink_pattern
from moire.plans import PlannedPattern
from moire.units import lpi_to_lpcm, page_vector

TONES = (0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95)
_READINGS = 3
_LEAST_PROBABLE = 0.02


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Original:
    """What is to be scanned.

    Attributes
    ----------
    patterns : tuple of Pattern
    planned : tuple of PlannedPattern
        The same, in words and numbers.
    probability : float
        That this is the true reading; 1 where it is given.
    """

    patterns: tuple[Pattern, ...]
    planned: tuple[PlannedPattern, ...]
    probability: float = 1.0

    @property
    def is_cloth(self) -> bool:
        return any(p.kind == "cloth" for p in self.planned)

    @property
    def finest_lpi(self) -> float:
        """The highest ruling or thread count, per inch."""
        return max(max(p.frequencies_lpi) for p in self.planned)


def printed_original(
    screens: Sequence[Screen],
    *,
    shape: Shape = "round",
    spread_um: float = 20.0,
    tones: tuple[float, ...] = TONES,
    probability: float = 1.0,
) -> Original:
    """A print of one or more screens.

    Raises
    ------
    BadRequest
        If there is no screen, or a ruling is not positive.
    """
    if not screens:
        raise BadRequest("no screen to plan for: give a ruling and angles")
    for s in screens:
        if not 10 <= s.ruling_lpi <= 1000:
            raise BadRequest(f"a ruling of {s.ruling_lpi:g} lpi is out of range: give 10 to 1000")
    patterns, planned = [], []
    for s in screens:
        name = _screen_name(s, screens)
        basis = np.array([page_vector(s.ruling_lpi, s.angle_deg + turn) for turn in (0, 90)])
        sigma = math.hypot(s.ruling_lpi_sigma, s.ruling_lpi * math.radians(s.angle_deg_sigma))
        dot = "line" if s.shape == "line" else shape
        patterns.append(ink_pattern(name, s.ink, basis, sigma, shape=dot, tones=tones, spread_um=spread_um))
        planned.append(
            _planned(name, "screen", (s.ruling_lpi, s.ruling_lpi), s.angle_deg, s.ruling_lpi_sigma)
        )
    return Original(patterns=tuple(patterns), planned=tuple(planned), probability=probability)


def woven_original(weave: Weave) -> Original:
    """A cloth; yarns of usual contrast, plain where the weave is not known.

    Raises
    ------
    BadRequest
        If a thread count is out of range.
    """
    counts = (weave.ends_per_inch, weave.picks_per_inch)
    if not all(2 <= c <= 500 for c in counts):
        raise BadRequest("a thread count is out of range: give 1 to 200 per cm")
    family: WeavePattern = "plain" if weave.pattern == "unknown" else weave.pattern
    binding = family if family == "knit" else weave.structure or family
    sigma = weave.sigma_per_cm * 2.54
    name = weave.structure if family == "knit" and weave.structure else f"{binding} weave"
    pattern = cloth_pattern(name, binding, *counts, weave.skew_deg, sigma)
    planned = _planned(name, "cloth", counts, weave.skew_deg, sigma)
    return Original(patterns=(pattern,), planned=(planned,))


def measured_originals(found: Examination, *, shape: Shape = "round") -> tuple[Original, ...]:
    """Readings of an examined scan, most probable first.

    Raises
    ------
    BadRequest
        If nothing was found to plan for, or the scan's rate is unknown.
    """
    if found.ppi is None:
        raise BadRequest(f"{found.file}: the sampling rate is unknown: give it with --from-ppi")
    printed = [f for f in found.findings if f.screen is not None]
    if printed:
        return _readings(printed, shape)
    woven = [f for f in found.findings if f.weave is not None]
    if woven:
        return _woven_readings(woven[0])
    raise BadRequest(
        f"{found.file}: no screen and no cloth was found in it: "
        "give --ruling and --angles, or --ends and --picks"
    )


def _woven_readings(finding: Finding) -> tuple[Original, ...]:
    """The cloth as it was read, or each reading that one scan leaves open."""
    assert finding.weave is not None
    if finding.settled or len(finding.candidates) < 2:
        return (woven_original(finding.weave),)
    out = []
    for c in finding.candidates[:_READINGS]:
        if c.ends_per_cm is None or c.picks_per_cm is None or c.probability < _LEAST_PROBABLE:
            continue
        cloth = replace(
            finding.weave,
            ends_per_cm=c.ends_per_cm,
            picks_per_cm=c.picks_per_cm,
            ends_per_inch=c.ends_per_cm * 2.54,
            picks_per_inch=c.picks_per_cm * 2.54,
            pattern=parse_binding(c.structure).pattern,
            structure=c.structure,
        )
        out.append(replace(woven_original(cloth), probability=c.probability))
    return tuple(out)


def _readings(findings: Sequence[Finding], shape: Shape) -> tuple[Original, ...]:
    first = [f.screen for f in findings if f.screen is not None]
    open_to = [f for f in findings if not f.settled and len(f.candidates) > 1]
    if not open_to:
        return (printed_original(first, shape=shape),)
    lead = open_to[0].candidates
    out = []
    for candidate in lead[:_READINGS]:
        if candidate.probability < _LEAST_PROBABLE:
            continue
        screens = [_read_as(f, candidate.ruling_lpi) for f in findings]
        out.append(printed_original(screens, shape=shape, probability=candidate.probability))
    return tuple(out)


def _read_as(finding: Finding, ruling_lpi: float) -> Screen:
    """The finding's screen, or its candidate nearest to a ruling that inks of one print share."""
    assert finding.screen is not None
    if finding.settled or not finding.candidates:
        return finding.screen
    near = min(finding.candidates, key=lambda c: abs(math.log(c.ruling_lpi / ruling_lpi)))
    return replace(
        finding.screen,
        ruling_lpi=near.ruling_lpi,
        ruling_lpcm=lpi_to_lpcm(near.ruling_lpi),
        angle_deg=near.angle_deg,
    )


def _planned(
    name: str, kind: str, lpi: tuple[float, float], angle_deg: float, sigma_lpi: float
) -> PlannedPattern:
    return PlannedPattern(
        name=name,
        kind="cloth" if kind == "cloth" else "screen",
        frequencies_lpi=lpi,
        frequencies_lpcm=(lpi_to_lpcm(lpi[0]), lpi_to_lpcm(lpi[1])),
        angle_deg=angle_deg,
        sigma_lpi=sigma_lpi,
    )


def _screen_name(screen: Screen, screens: Sequence[Screen]) -> str:
    alone = sum(s.ink == screen.ink for s in screens) == 1
    name = screen.ink if screen.ink != "unknown" else "screen"
    return name if alone and screen.ink != "unknown" else f"{name} at {screen.angle_deg:.0f} deg"
