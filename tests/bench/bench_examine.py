"""Accuracy of `examine` on prints and pictures not used while tuning: remakes docs/accuracy.md.

    python tests/bench/bench_examine.py [--set check|tuning] [--keep FOLDER] > docs/accuracy.md

Each print draws a picture, rulings, angles, dot shape, inks, dot gain and optics from the seed of
its set; tuning and check sets share no picture and no seed. Truth is what the press printed.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from prints import as_scan
from sheets import Layer, kept, scan_bent, scan_fold, scan_sheet
from signs import print_signs
from subjects import SEEDS

from moire.examine import examine
from moire.folds import judge_folds
from moire.lattice import Lattice, grid_distance
from moire.model import Finding
from moire.samples import tile_size
from moire.screens import name_inks
from moire.survey import take_survey
from moire.units import angle_distance, page_vector

_NEAR_CPP = 0.6 / 128


def reachable(layer: Layer, ppi: float) -> bool:
    """Both fundamentals below 0.95 of half the rate."""
    return layer[1] * max(abs(np.cos(np.radians(layer[2] + a))) for a in (0, 90)) <= 0.95 * ppi / 2


def lies_at(k: np.ndarray, layer: Layer, ppi: float, within: float = _NEAR_CPP) -> bool:
    """Whether an observed vector is this screen, folded or not."""
    true = [np.array(page_vector(layer[1] / ppi, layer[2] + a)) for a in (0, 90)]
    return min(grid_distance(k, t) for t in true) < within


def is_right(finding: Finding, layer: Layer) -> bool:
    """Whether the named ruling and angle are those printed, within 1 % and 0.6 degrees."""
    screen = finding.screen
    return (
        screen is not None
        and abs(screen.ruling_lpi / layer[1] - 1) < 0.01
        and angle_distance(screen.angle_deg, layer[2], 90) < 0.6
    )


def screens_row(
    kind: str, which: str, prints: int, ppi: float, quality: int | None, keep: Path | None
) -> str:
    """One row of the table of screens."""
    count = dict.fromkeys(("screens", "found", "folded", "named", "wrong", "extra"), 0)
    errors: list[tuple[float, float, float, float]] = []
    for number in range(prints):
        layers, scans = kept(keep, f"{which}_{kind}_{number}", lambda n=number: scan_sheet(kind, which, n))
        scan = as_scan(scans[ppi, quality], float(ppi), jpeg=quality is not None)
        listed = [f for f in examine(scan).findings if f.kind in ("halftone", "alias")]
        used: set[int] = set()
        for layer in layers:
            count["screens"] += reachable(layer, ppi)
            for i, f in enumerate(listed):
                k = np.array([[li.fx_cpp, li.fy_cpp] for li in f.lines if li.order == (1, 0)])[0]
                if i in used or not lies_at(k, layer, ppi):
                    continue
                used.add(i)
                if reachable(layer, ppi) and not is_right(f, layer):
                    count["folded"] += 1
                elif reachable(layer, ppi):
                    count["found"] += 1
                    count["named"] += f.screen.ink == layer[0]
                    count["wrong"] += f.screen.ink not in (layer[0], "unknown")
                    r = abs(f.screen.ruling_lpi / layer[1] - 1)
                    a = angle_distance(f.screen.angle_deg, layer[2], 90)
                    s = (r * layer[1] / f.screen.ruling_lpi_sigma, a / f.screen.angle_deg_sigma)
                    errors.append((100 * r, a, *s))
                break
        count["extra"] += len(used) < len(listed)
    e = np.array(errors).reshape(-1, 4)
    file = f"JPEG {quality}" if quality else "PNG"
    p = [[np.quantile(e[:, c], q) if len(e) else np.nan for q in (0.5, 0.9)] for c in (0, 1)]
    held = [(e[:, c] < 2).mean() if len(e) else np.nan for c in (2, 3)]
    return (
        f"| {kind} at {ppi:g}, {file} | {count['screens']} | {count['found']} "
        f"({count['found'] / max(count['screens'], 1):.1%}) | {count['folded']} | {count['named']} "
        f"({count['named'] / max(count['found'], 1):.1%}) | {count['wrong']} | {count['extra']} of {prints} | "
        f"{p[0][0]:.4f} / {p[0][1]:.4f} | {p[1][0]:.4f} / {p[1][1]:.4f} | {held[0]:.0%} / {held[1]:.0%} |"
    )


def print_folds(which: str, prints: int, keep: Path | None) -> None:
    """What one scan says of folding, and what two say; screens are found blind, then matched."""
    one: list[tuple[float, bool, bool]] = []
    two: list[tuple[bool, bool]] = []
    rates = (150, 200, 240, 300)
    for number in range(prints):
        layers, scans = kept(keep, f"{which}_fold_{number}", lambda n=number: scan_fold(which, n))
        taken = {r: as_scan(scans[r, None], float(r)) for r in rates}
        surveys = {r: take_survey(s, tile_size(s)) for r, s in taken.items()}

        def printed(rate: float, g: Lattice, layers: list[Layer] = layers) -> Layer | None:
            return next((layer for layer in layers if lies_at(g.k1, layer, rate)), None)

        for rate, survey in surveys.items():
            inks = name_inks(survey.lattices, survey.chroma)
            for g, fold in zip(survey.lattices, judge_folds(survey, inks), strict=True):
                layer = printed(rate, g)
                if layer is not None and fold is not None:
                    right = _fold_right(fold.screen, layer)
                    one.append((fold.candidates[0].probability, right, not reachable(layer, rate / 0.95)))
            for other in (r for r in rates if r > rate):
                seen = {printed(other, g) for g in surveys[other].lattices} - {None}
                folds = judge_folds(survey, inks, surveys[other])
                for g, fold in zip(survey.lattices, folds, strict=True):
                    layer = printed(rate, g)
                    if layer in seen and fold is not None and layer is not None:
                        two.append((_fold_right(fold.screen, layer), fold.settled))
    p, right, folded = (np.array(c) for c in zip(*one, strict=True))
    print("\n## Folds\n")
    print(f"{prints} prints of one or four inks, usual and odd, at 150, 200, 240 and 300 ppi.\n")
    print("| one scan: probability given | cases | mean given | right |\n|---|---|---|---|")
    for low, high in ((0, 0.5), (0.5, 0.75), (0.75, 0.9), (0.9, 0.97), (0.97, 1.01)):
        inside = (p >= low) & (p < high)
        if inside.any():
            print(
                f"| {low:g} to {min(high, 1):g} | {inside.sum()} | {p[inside].mean():.2f} | {right[inside].mean():.2f} |"
            )
    sure = p >= 0.9
    print(
        f"\nOne scan, decided (0.9 and above): {sure.mean():.0%} of {len(p)}; right of those {right[sure].mean():.1%}; "
        f"confident and wrong {(sure & ~right).mean():.1%} of all. Folded ones alone: {folded.sum()} cases, "
        f"{(sure & folded).sum()} decided, {right[sure & folded].mean():.0%} of those right."
    )
    good, settled = (np.array(c) for c in zip(*two, strict=True))
    print(f"\nTwo scans (rates given, turn estimated), screen seen in both: {good.mean():.1%} of {len(good)} right, "
          f"{settled.mean():.1%} settled.")  # fmt: skip


def _fold_right(screen: object, layer: Layer) -> bool:
    gap = angle_distance(screen.angle_deg, layer[2], 90)  # type: ignore[attr-defined]
    return abs(screen.ruling_lpi / layer[1] - 1) < 0.01 and gap < 0.6  # type: ignore[attr-defined]


def print_bent(which: str, prints: int, keep: Path | None) -> None:
    """Screens of prints whose scale drifts by 5 %."""
    screens = found = named = extra = scans_seen = 0
    for number in range(prints):
        layers, scans = kept(keep, f"{which}_bent_{number}", lambda n=number: scan_bent(which, n))
        for (ppi, _), pixels in scans.items():
            listed = [
                f for f in examine(as_scan(pixels, float(ppi))).findings if f.kind in ("halftone", "alias")
            ]
            used: set[int] = set()
            scans_seen += 1
            for layer in layers:
                screens += reachable(layer, ppi)
                for i, f in enumerate(listed):
                    k = np.array([[li.fx_cpp, li.fy_cpp] for li in f.lines if li.order == (1, 0)])[0]
                    if i not in used and lies_at(k, layer, ppi, within=1.5 / 128):
                        used.add(i)
                        found += reachable(layer, ppi)
                        named += bool(reachable(layer, ppi) and f.screen and f.screen.ink == layer[0])
                        break
            extra += len(used) < len(listed)
    print("\n## Bent pages\n")
    print(f"{prints} four-ink prints at 300 and 400 ppi, scale changing by 5 % over the frame: {found} of {screens} "
          f"screens found, {named} rightly named; {extra} of {scans_seen} scans list another.")  # fmt: skip


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--set", default="check", choices=sorted(SEEDS))
    parser.add_argument("--keep", type=Path, help="folder to keep the prints' scans in between runs")
    parser.add_argument("--prints", type=int, default=24)
    args = parser.parse_args()
    start = time.perf_counter()
    half, quarter = args.prints // 2, args.prints // 4
    print("# Accuracy of examine\n")
    print(f"Set `{args.set}`; remade by `python tests/bench/bench_examine.py > docs/accuracy.md`.\n")
    print("## Screens\n")
    print(
        "| prints, ppi, file | screens | found | fold wrong | rightly named | wrong ink | scans with an extra | "
        "ruling error % p50 / p90 | angle error deg p50 / p90 | truth within 2 sigma |"
    )
    print("|---|---|---|---|---|---|---|---|---|---|")
    for kind, prints in (("one", args.prints), ("four", half), ("singular", quarter)):
        for ppi in (300, 400, 600):
            for quality in (None, 85, 75):
                print(screens_row(kind, args.set, prints, ppi, quality, args.keep), flush=True)
    print(
        f"\n{args.prints} prints of one ink, {half} of four, {quarter} of the singular 15/75/0/45 set, 1.5 in square, "
        "turned by up to 1.5 degrees. A screen counts where both fundamentals lie below 0.95 of half the rate; "
        "found means within 1 % and 0.6 degrees of what was printed; `fold wrong` were seen but given another "
        "fold. Errors are in pixels: a scanner's own scale comes on top. Half of the pictures are drawn "
        "(dead leaves), with harder edges than photographs have; single inks on them are put on the wrong "
        "fold more often."
    )
    print_folds(args.set, args.prints, args.keep)
    print_bent(args.set, quarter, args.keep)
    print_signs(args.set)
    print(
        "\nThe check set was not looked at while the rules of screens, folds and drift were made. The evidence "
        "that\nbanding asks for was chosen on the tuning set after this table had shown 4 % of clean crops "
        "accused, and\nits least amplitude after seeing on which crops: those two rows are no longer held out."
    )
    print(f"made in {time.perf_counter() - start:.0f} s", file=sys.stderr)


if __name__ == "__main__":
    main()
