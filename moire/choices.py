"""Choices: each rate with its beats and the verdict that an examination would give."""

from __future__ import annotations

import numpy as np

from moire.judging import Judged
from moire.model import Finding, Kind, Line, Verdict
from moire.naming import list_beats
from moire.originals import Original
from moire.plans import Choice
from moire.prediction import Capture
from moire.verdict import judge

_MANY = 100


def make_choices(judged: Judged, original: Original, capture: Capture) -> tuple[Choice, ...]:
    """One choice for each rate of the capture; of very many, only the strongest beats are named."""
    rates = capture.rates
    detail = 2.0 if original.is_cloth else 1.0
    natural = np.where(judged.by_sampling, 0, judged.visibility).max(axis=1, initial=0.0)
    folded = np.where(judged.by_sampling, judged.visibility, 0).max(axis=1, initial=0.0)
    verdicts = _verdicts(judged, original, capture)
    out = []
    for i, rate in enumerate(rates.tolist()):
        beats = list_beats(judged, original, capture, i, brief=len(rates) > _MANY)
        listed = max((b.visibility for b in beats if b.source == "sampling"), default=0.0)
        out.append(
            Choice(
                ppi=(rate[0], rate[1]),
                turn_deg=capture.turn_deg,
                master_ppi=capture.grid if capture.derivative else None,
                kernel=capture.kernel if capture.grid is not None else None,
                beats=beats,
                visibility=max(listed, float(folded[i])),
                original_visibility=float(natural[i]),
                doubt=0.0,
                keeps_detail=min(rate) >= detail * original.finest_lpi,
                verdict=verdicts[i],
            )
        )
    return tuple(out)


def _verdicts(judged: Judged, original: Original, capture: Capture) -> list[Verdict]:
    """What an examination of each scan would say of these lines."""
    lines = judged.lines
    image = (lines.image != 0).any(axis=1)
    owner = np.array([parts[0][0] for parts in lines.parts])
    groups: list[tuple[int | None, Kind, np.ndarray]] = [
        (None, "unexplained", np.flatnonzero(image)),
        (None, "rosette", np.flatnonzero(~image & ~judged.alone)),
    ]
    for index, pattern in enumerate(original.patterns):
        kind: Kind = "halftone" if pattern.is_ink else "weave"
        groups.append((index, kind, np.flatnonzero(~image & judged.alone & (owner == index))))
    worst = [judged.visibility[:, members].max(axis=1, initial=0.0).tolist() for _, _, members in groups]
    basic = [_fundamentals(judged, original, capture, index) for index, _, _ in groups]
    out = []
    for i in range(len(capture.rates)):
        findings = []
        for g, (_, kind, _) in enumerate(groups):
            folded = tuple(line for seen, line in basic[g][i] if seen >= 1)
            if worst[g][i] >= 1:
                findings.append(
                    Finding(
                        kind="alias" if folded else kind, confidence=1.0, visibility=worst[g][i],
                        coverage=1.0, regions=(), lines=folded, period_px=0.0,
                    )
                )  # fmt: skip
        out.append(judge(tuple(findings))[0])
    return out


def _fundamentals(
    judged: Judged, original: Original, capture: Capture, index: int | None
) -> list[list[tuple[float, Line]]]:
    """At each rate the pattern's own two lines where they are folded, with their visibility."""
    lines = judged.lines
    out: list[list[tuple[float, Line]]] = [[] for _ in capture.rates]
    if index is None:
        return out
    repeat = original.patterns[index].repeat
    basic = {((index, repeat, 0),): (1, 0), ((index, 0, repeat),): (0, 1)}
    for line, parts in enumerate(lines.parts):
        if parts not in basic or lines.image[line].any():
            continue
        seen = (lines.seen_cpi[:, line] / capture.rates).tolist()
        for i in np.flatnonzero(judged.by_sampling[:, line]):
            record = Line(
                fx_cpp=seen[i][0], fy_cpp=seen[i][1], sigma_cpp=0.0, snr_db=0.0, order=basic[parts],
                amplitude=float(lines.amplitude[i, line]),
            )  # fmt: skip
            out[i].append((float(judged.visibility[i, line]), record))
    return out
