"""Reasons: why a choice is recommended, and what would settle an open reading, in words."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from moire.originals import Original
from moire.plans import Choice
from moire.sampling import fold_all, turned

_TOLD_APART_CPI = 2.0


def explain(
    choices: tuple[Choice, ...], originals: Sequence[Original], free_from: float | None, *, derivative: bool
) -> tuple[str, ...]:
    """Why the first choice is recommended, a sentence each."""
    best = choices[0]
    beats = [b for b in best.beats if b.source != "rosette"]
    what = "reduce to" if derivative else "scan at"
    name = rate_in_words(best)
    worst = max(best.visibility, best.doubt)
    out = []
    if worst < 1:
        rest = (
            f"the strongest is {beats[0].words}, {best.visibility:.1f} x the eye's threshold"
            if beats
            else "none is near it"
        )
        out.append(
            f"{what.capitalize()} {name}: every beat with the grid stays below what the eye sees; {rest}."
        )
    else:
        lead = beats[0].words if beats else "another reading of the original"
        out.append(
            f"No choice is free of visible beats. {name} shows least: {lead}, "
            f"{worst:.1f} x the eye's threshold."
        )
    if not best.keeps_detail:
        out.append("It is coarser than the original's own detail: no finer choice is free of beats.")
    if best.verdict == "mendable" and best.original_visibility >= 1:
        out.append(
            f"The original's own pattern is still seen, {best.original_visibility:.0f} x the threshold, "
            "as printed: that is no beat. Mend a derivative with `moire mend`."
        )
    rosettes = [b for b in best.beats if b.source == "rosette" and b.visibility >= 1]
    if rosettes and rosettes[0].period_mm is not None:
        out.append(
            f"The inks beat with each other on the sheet itself, whatever the rate: {rosettes[0].words}, "
            f"{rosettes[0].period_mm:.2f} mm."
        )
    if worst >= 1 and not derivative and free_from is not None:
        out.append(f"From {free_from:.0f} ppi up, sampled directly, no beat would be seen.")
    if derivative and (worst >= 1 or not best.keeps_detail):
        out.append("`moire mend --to-ppi` takes the screen out first and reduces then: no screen, no beat.")
    if len(originals) > 1:
        chance = originals[0].probability
        out.append(
            f"The original is read as the most probable ({chance:.2f}) of {len(originals)} "
            "that one scan leaves open."
        )
    return tuple(out)


def rate_in_words(choice: Choice) -> str:
    """A choice by its rate and turn."""
    x, y = choice.ppi
    rate = f"{x:g} ppi" if x == y else f"{x:g} x {y:g} ppi"
    return rate if choice.turn_deg == 0 else f"{rate} turned by {choice.turn_deg:g} degrees"


def settling_scan(originals: Sequence[Original], choices: Sequence[Choice]) -> str | None:
    """The second scan that would tell the readings apart, in words."""
    if len(originals) < 2:
        return None
    best: tuple[float, Choice, list[float]] | None = None
    for choice in choices:
        rate = np.array(choice.ppi)
        seen = [
            np.abs(fold_all(turned(o.patterns[0].basis_cpi[0], choice.turn_deg), rate)[0]) for o in originals
        ]
        # A square screen looks the same after a quarter turn, and a line the same mirrored.
        gaps = [
            min(float(np.hypot(*(a - b))), float(np.hypot(*(a - b[::-1]))))
            for n, a in enumerate(seen)
            for b in seen[:n]
        ]
        if best is None or min(gaps) > best[0]:
            best = (min(gaps), choice, [float(np.hypot(*s)) for s in seen])
    if best is None or best[0] < _TOLD_APART_CPI:
        return (
            "None of these rates tells the readings apart: scan once more at an odd rate, "
            "or turned by 5 degrees."
        )
    shown = ", ".join(
        f"{o.planned[0].frequencies_lpi[0]:.1f} lpi at {s:.1f}"
        for o, s in zip(originals, best[2], strict=True)
    )
    return (
        f"A second scan at {rate_in_words(best[1])} settles it (examine --second): the first screen "
        f"would show, in cycles per inch, {shown}."
    )
