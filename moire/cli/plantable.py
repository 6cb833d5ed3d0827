"""A plan as text: what it is for, its choices as a table, and the reasons."""

from __future__ import annotations

from typing import TYPE_CHECKING

from moire.reasons import rate_in_words

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from moire.plans import Choice, Plan, PlannedPattern

_ROWS = 9


def show_plan(out: Console, made: Plan) -> None:
    """The original, the reasons, the best choices and the worst, the rules, the caution."""
    from rich.markup import escape

    for pattern in made.patterns:
        out.print(f"Original: [bold]{escape(_pattern(pattern))}[/bold]")
    for line in made.why:
        out.print(f"  {escape(line)}")
    out.print(_table(made))
    where = "at 1:1 on a monitor" if made.viewing.condition == "monitor" else "as a print in the hand"
    out.print(f"Seen: strongest beat with the grid over the eye's threshold {where}; 1 is just visible.")
    for reading in made.readings:
        names = "; ".join(_pattern(p) for p in reading.patterns)
        rate = "" if reading.ppi is None else f" Then {reading.ppi[0]:g} ppi, {reading.visibility:.1f} x."
        out.print(f"Or ({reading.probability:.2f}) {escape(names)}.{rate}")
    if made.settle:
        out.print(escape(made.settle))
    for rule in made.rules:
        out.print(
            f"Rule of the trade, {rule.rule}: {'holds' if rule.agrees else 'does not hold'}; {rule.words}."
        )
    out.print(made.caution)


def _table(made: Plan) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0))
    table.add_column("", no_wrap=True)
    table.add_column("scan" if made.choices[0].master_ppi is None else "reduce to", max_width=13)
    for title in ("seen", "mm", "px", "L*"):
        table.add_column(title, justify="right", no_wrap=True)
    table.add_column("verdict", no_wrap=True)
    table.add_column("strongest beat")
    shown = _shown(made)
    for i in shown:
        mark = "best" if i == made.recommended else "worst" if i == len(made.choices) - 1 else ""
        table.add_row(mark, *_row(made.choices[i]))
    return table


def _shown(made: Plan) -> list[int]:
    """All choices where they are few; else the best, the best of each band of rates, and the worst."""
    count = len(made.choices)
    if count <= _ROWS + 1:
        return list(range(count))
    rates = [c.ppi[0] for c in made.choices]
    low, high = min(rates), max(rates)
    bands = [int((_ROWS - 1) * (r - low) / max(high - low, 1e-9) * 0.9999) for r in rates]
    first = {band: i for i, band in reversed(list(enumerate(bands)))}
    return sorted({0, *first.values(), count - 1})


def _row(choice: Choice) -> tuple[str, ...]:
    rate = rate_in_words(choice).replace(" ppi turned by ", " at ").replace(" degrees", " deg")
    rate = rate.removesuffix(" ppi") + ("" if choice.keeps_detail else " (coarse)")
    beat = next((b for b in choice.beats if b.source != "rosette"), None)
    seen = (
        f"{choice.visibility:.1f}"
        if choice.doubt <= choice.visibility
        else f"{choice.visibility:.1f}-{choice.doubt:.1f}"
    )
    if beat is None:
        return rate, seen, "", "", "", choice.verdict, "none near the eye's threshold"
    span = beat.period_mm_range
    period = "-" if beat.period_mm is None else _digits(beat.period_mm)
    if span is not None and span[1] - span[0] > 0.02 * sum(span) / 2:
        period = f"{_digits(span[0])}-{_digits(span[1])}"
    pixels = "" if beat.period_px is None else f"{beat.period_px:.1f}"
    return rate, seen, period, pixels, f"{beat.amplitude:.1f}", choice.verdict, beat.words


def _digits(value: float) -> str:
    return f"{value:.3g}" if value < 1 else f"{value:.1f}"


def _pattern(p: PlannedPattern) -> str:
    sigma = f" +/- {p.sigma_lpi:.2g}" if p.sigma_lpi > 0 else ""
    if p.kind == "cloth":
        return f"{p.name}, {p.frequencies_lpcm[0]:.2f} ends by {p.frequencies_lpcm[1]:.2f} picks/cm"
    ruling = f"{p.frequencies_lpi[0]:.4g}{sigma} lpi ({p.frequencies_lpcm[0]:.2f}/cm)"
    return f"{p.name}, {ruling} at {p.angle_deg:.1f} deg"
