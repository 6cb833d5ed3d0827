"""Accuracy of thread counts on proof cloth that was not used while tuning: tables of docs/textiles.md.

    python tests/bench/bench_weaves.py [--set check|tuning] [--cloths N] [--jitter 0.03,0.10]

Each cloth draws its weave, setts, yarns, colours and optics from the seed of its set. Truth is how
the threads lie on the very sheet.
"""

from __future__ import annotations

import argparse
import sys
import time
from dataclasses import dataclass

import numpy as np
import skimage.data
from numpy.typing import NDArray

from moire.bindings import parse_binding
from moire.loom import KNIT, Cloth, stripes
from moire.scanner import Scanner, digitise, sample, srgb_decode
from moire.vision import lightness
from moire.weaves import find_threads, measure_weave

SEEDS = {"tuning": 31000, "check": 640000}
PICTURES = {"tuning": ("astronaut", "chelsea"), "check": ("coffee", "rocket")}
WOVEN = (
    "plain", "plain", "plain", "basket2/2", "twill2/1Z", "twill2/1S", "twill3/1Z", "twill3/1S",
    "twill1/3Z", "twill2/2Z", "twill2/2S", "satin5/2", "satin5/3", "satin8/3", "satin8/5",
)  # fmt: skip
SIDE_IN = {300: 2.4, 400: 2.0, 600: 1.5}


@dataclass(frozen=True)
class Swatch:
    cloth: Cloth
    scanner: Scanner
    pixels: NDArray[np.uint8]


def draw_swatch(which: str, number: int, jitter: float, patterns: tuple[str, ...] = WOVEN) -> Swatch:
    """Swatch `number` of a set, with yarns `jitter` uneven."""
    rng = np.random.default_rng(SEEDS[which] + number)
    pattern = patterns[number % len(patterns)]
    ppi = float(rng.choice(list(SIDE_IN)))
    # Threads of 3.3 to 26 pixels; the weft is the coarser set more often than not.
    ends = float(np.exp(rng.uniform(np.log(8), np.log(min(45, ppi / 2.54 / 3.3)))))
    picks = float(np.clip(ends * np.exp(rng.normal(-0.15, 0.25)), 6, ppi / 2.54 / 3.3))
    tone = rng.uniform(0.12, 0.7)
    tint = rng.uniform(0.7, 1.3, (2, 3))
    warp, weft = np.clip(tone * tint * np.array([[1.0], [np.exp(rng.normal(0, 0.45))]]), 0.02, 0.9)
    colours = tuple(tuple(float(v) for v in c) for c in (warp, weft))
    dark = tuple(float(v) for v in 0.4 * warp)
    kind = rng.random()
    bands = stripes(int(rng.integers(4, 40)), colours[0], dark) if kind < 0.3 else ()  # type: ignore[arg-type]
    figure = None
    if kind > 0.85:
        picture = getattr(skimage.data, PICTURES[which][number % 2])()[:400, :400, :3] / 255
        figure = (0.35 + 0.65 * srgb_decode(picture)).astype(np.float32)
    cloth = Cloth(
        width_in=SIDE_IN[int(ppi)], height_in=SIDE_IN[int(ppi)], ends_per_cm=ends, picks_per_cm=picks,
        pattern=pattern, warp=colours[0], weft=colours[1], warp_stripes=bands,  # type: ignore[arg-type]
        weft_stripes=bands if kind < 0.12 else (), unevenness=float(rng.uniform(0.05, 0.4)), jitter=jitter,
        thickness=float(rng.uniform(0.02, 0.15)), hair=float(rng.uniform(0, 0.8)),
        skew_deg=float(rng.normal(0, 1.2)), bow=float(rng.normal(0, 0.006)), figure=figure,
        dpi=max(1800.0, 3 * ppi), seed=SEEDS[which] + number,
    )  # fmt: skip
    scanner = Scanner(
        ppi=(ppi, ppi), turn_deg=float(rng.normal(0, 1.5)), lens_px=float(rng.uniform(0.25, 0.5)),
        noise=float(rng.uniform(0.003, 0.012)), jpeg_quality=85 if rng.random() < 0.3 else None,
    )  # fmt: skip
    return Swatch(cloth=cloth, scanner=scanner, pixels=digitise(sample(cloth, scanner), scanner, rng))


@dataclass(frozen=True)
class Tally:
    """Errors over the swatches of one row: % of the sett, in sigmas, and patterns named right."""

    swatches: int
    found: int
    family: int
    structure: int
    error: tuple[float, ...]
    pull: tuple[float, ...]
    skew: tuple[float, ...]


def run(which: str, cloths: int, jitter: float, *, show: bool = False) -> Tally:
    found = family = structure = 0
    error: list[float] = []
    pull: list[float] = []
    skew: list[float] = []
    for number in range(cloths):
        swatch = draw_swatch(which, number, jitter)
        cloth = swatch.cloth
        start = time.perf_counter()
        threads = find_threads(lightness(swatch.pixels.astype(np.float32)))
        took = time.perf_counter() - start
        line = f"{number} {cloth.pattern} {cloth.ends_per_cm:.2f}x{cloth.picks_per_cm:.2f}"
        line += f" px {swatch.scanner.ppi[0] / 2.54 / cloth.ends_per_cm:.1f}"
        line += f" {swatch.scanner.ppi[0] / 2.54 / cloth.picks_per_cm:.1f}"
        line += f" {'stripe ' if cloth.warp_stripes else ''}{'figure' if cloth.figure is not None else ''}"
        if threads is None:
            if show:
                print(line, "NOT FOUND", f"{took:.1f} s", file=sys.stderr)
            continue
        weave = measure_weave(threads, swatch.scanner.ppi)
        truth = cloth.true_setts()
        found += 1
        binding = parse_binding(cloth.pattern) if cloth.pattern != KNIT else None
        family += weave.pattern == (binding.pattern if binding else KNIT)
        right = weave.structure == (binding.structure if binding else "single jersey")
        structure += right
        errors = (weave.ends_per_cm / truth[0] - 1, weave.picks_per_cm / truth[1] - 1)
        sigmas = (weave.ends_sigma_per_cm or 0.0, weave.picks_sigma_per_cm or 0.0)
        error += [100 * abs(e) for e in errors]
        pull += [abs(e) * t / s for e, t, s in zip(errors, truth, sigmas, strict=True)]
        skew.append(abs(weave.skew_deg - cloth.skew_deg))
        if show:
            line += f" | {weave.structure} gain {threads.fit.gain:.0f}"
            line += f" err% {100 * errors[0]:.2f} {100 * errors[1]:.2f} pull {pull[-2]:.1f} {pull[-1]:.1f}"
            line += f" skew {weave.skew_deg:.2f}/{cloth.skew_deg:.2f} bow {weave.bow:.4f}/{cloth.bow:.4f}"
            line += f" jit {threads.count.jitter[0]:.3f} {threads.count.jitter[1]:.3f} {took:.1f} s"
            line += "" if right and max(errors, key=abs) < 0.02 else "  <<<"
            print(line, file=sys.stderr)
    return Tally(
        swatches=cloths, found=found, family=family, structure=structure, error=tuple(error),
        pull=tuple(pull), skew=tuple(skew),
    )  # fmt: skip


def row(name: str, t: Tally) -> str:
    """One line of the table."""
    e, z = np.array(t.error), np.array(t.pull)
    return (
        f"| {name} | {t.swatches} | {t.found} | {t.family} | {t.structure} | "
        f"{np.median(e):.3f} / {np.quantile(e, 0.9):.3f} / {e.max():.2f} | "
        f"{np.mean(z < 1):.0%} / {np.mean(z < 2):.0%} | {np.median(t.skew):.2f} |"
    )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--set", default="check", choices=sorted(SEEDS))
    parser.add_argument("--cloths", type=int, default=60)
    parser.add_argument("--jitter", default="0.03,0.10")
    parser.add_argument("--show", action="store_true", help="Every swatch, on stderr.")
    args = parser.parse_args()
    print(
        "| yarn jitter | swatches | found | family right | structure right | "
        "sett error % p50 / p90 / max | truth within 1 / 2 sigma | skew error deg p50 |"
    )
    print("|---|---|---|---|---|---|---|---|")
    for jitter in map(float, args.jitter.split(",")):
        print(row(f"{jitter:.0%}", run(args.set, args.cloths, jitter, show=args.show)), flush=True)


if __name__ == "__main__":
    main()
