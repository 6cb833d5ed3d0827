"""Accuracy of `examine` on prints that were not used while tuning: remakes docs/accuracy.md.

    python tests/bench/bench_examine.py [--set check|tuning] [--prints N] > docs/accuracy.md

Each print draws a picture, rulings, angles, dot shape, inks, dot gain and optics from the seed of
its set; tuning and check sets share no picture and no seed. Truth is what the press printed.
"""

from __future__ import annotations

import argparse
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from prints import scanned
from subjects import SEEDS, subject

from moire.examine import examine
from moire.press import Print
from moire.proof import ScreenOrder, print_sheet
from moire.units import angle_distance

INKS = ("cyan", "magenta", "yellow", "black")


@dataclass(frozen=True)
class Tally:
    """Counts and errors over the scans of one row."""

    screens: int
    found: int
    named: int
    scans: int
    with_extra: int
    ruling_error: tuple[float, ...]
    angle_error: tuple[float, ...]
    ruling_z: tuple[float, ...]
    angle_z: tuple[float, ...]


def draw_print(kind: str, which: str, number: int) -> Print:
    """Print `number` of a set: ``one`` ink at any angle, or ``four`` inks."""
    rng = np.random.default_rng(SEEDS[which] + number + (0 if kind == "one" else 5000))
    picture = subject(which, number, rng)
    spot = ("round", "ellipse", "diamond", "square")[int(rng.integers(4))]
    if kind == "one":
        ink = "black" if rng.random() < 0.6 else str(rng.choice(INKS[:3]))
        orders = [(float(rng.uniform(65, 200)), float(rng.uniform(0, 90)), ink)]
    elif kind == "four":
        ruling, turn = float(rng.uniform(85, 180)), float(rng.uniform(-8, 8))
        angles = (15, 75, 0, 45) if number % 2 else (75, 15, 0, 45)
        orders = [
            (ruling * float(rng.uniform(0.985, 1.015)), a + turn + float(rng.normal(0, 0.2)), ink)
            for a, ink in zip(angles, INKS, strict=True)
        ]
        orders[2] = (orders[2][0] * float(rng.choice([1.0, 1.06, 1.12])), orders[2][1], "yellow")
    else:
        ruling = float(rng.uniform(85, 180))
        orders = [(ruling, a, ink) for a, ink in zip((15, 75, 0, 45), INKS, strict=True)]
    screens = tuple(ScreenOrder(ruling_lpi=r, angle_deg=a, ink=i, spot=spot) for r, a, i in orders)
    return print_sheet(
        picture,
        screens,
        width_in=1.5,
        height_in=1.5,
        spread_um=float(rng.uniform(12, 35)),
        gain=float(rng.uniform(0.05, 0.2)),
        seed=number,
    )


def run(kind: str, which: str, prints: int, ppi: float, jpeg: int | None) -> Tally:
    """Examine each print at one rate and compare with the truth."""
    screens = found = named = extra = 0
    errors: tuple[list[float], ...] = ([], [], [], [])
    for number in range(prints):
        sheet = draw_print(kind, which, number)
        rng = np.random.default_rng(SEEDS[which] + 9000 + number)
        turn = float(rng.uniform(-1.5, 1.5))
        optics = {"lens_px": float(rng.uniform(0.25, 0.5)), "noise": float(rng.uniform(0.003, 0.012))}
        scan, _ = scanned(sheet, ppi, turn_deg=turn, jpeg_quality=jpeg, **optics)
        listed = [f for f in examine(scan).findings if f.kind in ("halftone", "alias") and f.screen]
        matched: set[int] = set()
        for layer in sheet.layers:
            angle = layer.angle_deg + turn
            reach = layer.ruling_lpi * max(abs(np.cos(np.radians(angle + a))) for a in (0, 90))
            if reach > 0.95 * ppi / 2:
                continue
            screens += 1
            for i, f in enumerate(listed):
                gap = angle_distance(f.screen.angle_deg, angle, 90)
                if abs(f.screen.ruling_lpi / layer.ruling_lpi - 1) < 0.01 and gap < 0.6 and i not in matched:
                    matched.add(i)
                    found += 1
                    named += f.screen.ink == layer.ink
                    error = f.screen.ruling_lpi / layer.ruling_lpi - 1
                    errors[0].append(100 * abs(error))
                    errors[1].append(gap)
                    errors[2].append(abs(error) * layer.ruling_lpi / f.screen.ruling_lpi_sigma)
                    errors[3].append(gap / f.screen.angle_deg_sigma)
                    break
        true_or_alias = [f for i, f in enumerate(listed) if i not in matched]
        extra += any(not _is_printed(f, sheet, turn, ppi) for f in true_or_alias)
    return Tally(
        screens=screens, found=found, named=named, scans=prints, with_extra=extra,
        ruling_error=tuple(errors[0]), angle_error=tuple(errors[1]),
        ruling_z=tuple(errors[2]), angle_z=tuple(errors[3]),
    )  # fmt: skip


def _is_printed(finding: object, sheet: Print, turn: float, ppi: float) -> bool:
    """Whether a listed lattice is, folded, one of the printed screens."""
    from moire.lattice import grid_distance
    from moire.units import page_vector

    k = np.array([[li.fx_cpp, li.fy_cpp] for li in finding.lines if li.order in ((1, 0), (0, 1))])  # type: ignore[attr-defined]
    for layer in sheet.layers:
        true = [np.array(page_vector(layer.ruling_lpi / ppi, layer.angle_deg + turn + a)) for a in (0, 90)]
        if any(grid_distance(k[0], t) < 0.6 / 128 for t in true):
            return True
    return False


def row(name: str, t: Tally) -> str:
    """One line of the table."""

    def p(values: tuple[float, ...], q: float) -> str:
        return f"{np.quantile(values, q):.4f}" if values else "-"

    inside = [float(np.mean(np.array(z) < 2)) if z else float("nan") for z in (t.ruling_z, t.angle_z)]
    return (
        f"| {name} | {t.screens} | {t.found} ({t.found / max(t.screens, 1):.1%}) | "
        f"{t.named} ({t.named / max(t.found, 1):.1%}) | {t.with_extra} of {t.scans} | "
        f"{p(t.ruling_error, 0.5)} / {p(t.ruling_error, 0.9)} | "
        f"{p(t.angle_error, 0.5)} / {p(t.angle_error, 0.9)} | "
        f"{inside[0]:.0%} / {inside[1]:.0%} |"
    )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--set", default="check", choices=sorted(SEEDS))
    parser.add_argument("--prints", type=int, default=12)
    parser.add_argument("--kinds", default="one,four,singular")
    parser.add_argument("--ppi", default="300,400,600")
    parser.add_argument("--jpeg", default="0,85")
    args = parser.parse_args()
    print("# Accuracy of examine\n")
    print(
        f"Set `{args.set}`, {args.prints} prints a row, 1.5 in square; by `tests/bench/bench_examine.py`.\n"
    )
    print(
        "| prints, ppi, file | screens | found | rightly named | scans with an extra | "
        "ruling error % p50 / p90 | angle error deg p50 / p90 | truth within 2 sigma |"
    )
    print("|---|---|---|---|---|---|---|---|")
    start = time.perf_counter()
    for kind in args.kinds.split(","):
        for ppi in map(float, args.ppi.split(",")):
            for quality in map(int, args.jpeg.split(",")):
                name = f"{kind} at {ppi:g}, {f'JPEG {quality}' if quality else 'PNG'}"
                print(row(name, run(kind, args.set, args.prints, ppi, quality or None)), flush=True)
    print(f"\nmade in {time.perf_counter() - start:.0f} s", file=sys.stderr)


if __name__ == "__main__":
    main()
