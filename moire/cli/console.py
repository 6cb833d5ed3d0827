"""Records as text for people, at any width from 60 columns up."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from moire.model import Examination, Finding, Mending


def console(*, as_json: bool, quiet: bool) -> Console:
    """Where human text goes: stdout, or stderr beside a JSON document."""
    from rich.console import Console

    return Console(file=sys.stderr if as_json else sys.stdout, quiet=quiet, highlight=False, soft_wrap=False)


def print_json(record: Any) -> None:
    """One JSON document on stdout."""
    import msgspec

    sys.stdout.write(msgspec.json.format(msgspec.json.encode(record), indent=1).decode() + "\n")


def show_examination(out: Console, found: Examination) -> None:
    """Verdict, advice and a table of findings."""
    from rich.markup import escape

    ppi = "ppi unknown" if found.ppi is None else f"{_rate(found.ppi)} ppi ({found.ppi_source})"
    out.print(f"[bold]{escape(found.file)}[/bold]  {found.width_px} x {found.height_px} px, {ppi}")
    out.print(f"Verdict: [bold]{found.verdict}[/bold]" + _seen(found))
    for line in found.advice:
        out.print(f"  {line}")
    if found.findings:
        out.print(_findings_table(found.findings))


def show_mending(out: Console, done: Mending, target: str) -> None:
    """What was removed and what was kept."""
    from rich.markup import escape

    m = done.measures
    out.print(f"Wrote [bold]{escape(target)}[/bold]: a derivative, not evidence and not for measurement.")
    if not done.recipe.removals:
        out.print("  Nothing was removed: no artifact of the kinds asked for was found.")
        return
    fundamentals = [line.removed_db for line in m.lines]
    if fundamentals:
        out.print(
            f"  Removed: {len(m.lines)} lines, {min(fundamentals):.0f} to {max(fundamentals):.0f} dB; "
            f"visibility {m.visibility_before:.1f} before, {m.visibility_after:.1f} after."
        )
    kept = f"colour shift {m.colour_shift_mean:.2f} mean (CIEDE2000)"
    if m.edge_energy_ratio is not None:
        kept = f"edge energy {m.edge_energy_ratio:.2f} of the master's, " + kept
    out.print(f"  Kept: {kept}; clipped {m.clipped_share:.2%}.")
    out.print(f"  Verdict now: [bold]{done.after.verdict}[/bold].")


def _seen(found: Examination) -> str:
    if found.visibility <= 0:
        return ""
    where = "at 1:1 on a monitor" if found.viewing.condition == "monitor" else "as a print in the hand"
    return f"  (strongest artifact {found.visibility:.1f} x the eye's threshold {where})"


def _findings_table(findings: tuple[Finding, ...]) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1))
    for title in ("#", "kind", "what"):
        table.add_column(title)
    for title in ("period px", "visible", "covers"):
        table.add_column(title, justify="right")
    for i, finding in enumerate(findings):
        table.add_row(
            str(i), finding.kind, _what(finding), f"{finding.period_px:.2f}", f"{finding.visibility:.1f}",
            f"{finding.coverage:.0%}",
        )  # fmt: skip
    return table


def _what(finding: Finding) -> str:
    if finding.screen is not None:
        s = finding.screen
        text = (
            f"{s.ink} {s.shape} screen, {_with_sigma(s.ruling_lpi, s.ruling_lpi_sigma)} lpi "
            f"({s.ruling_lpcm:.2f}/cm) at {_with_sigma(s.angle_deg, s.angle_deg_sigma)} deg"
        )
        return text if finding.settled else text + ", not settled by one scan"
    if finding.weave is not None:
        w = finding.weave
        what, by = ("wales", "courses") if w.pattern == "knit" else ("ends", "picks")
        name = w.structure or w.pattern
        text = f"{name}, {w.ends_per_cm:.2f} {what}/cm by {w.picks_per_cm:.2f} {by}/cm"
        return text if finding.settled else text + ", not settled by one scan"
    if finding.parents:
        return f"beat of {' and '.join(str(p) for p in finding.parents)}"
    return finding.evidence[0] if finding.evidence else ""


def _with_sigma(value: float, sigma: float) -> str:
    digits = 3 if sigma < 0.005 else 2 if sigma < 0.05 else 1
    return f"{value:.{digits}f} +/- {max(sigma, 10**-digits):.{digits}f}"


def _rate(ppi: tuple[float, float]) -> str:
    return f"{ppi[0]:g}" if ppi[0] == ppi[1] else f"{ppi[0]:g} x {ppi[1]:g}"
