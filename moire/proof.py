"""Proofs: test scans with known truth, made by the forward model."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

import moire
from moire.bindings import parse_binding
from moire.folding import fold
from moire.loom import KNIT, Cloth
from moire.press import InkLayer, Print, Spot, separate
from moire.scanner import Scanner, Sheet, digitise, sample
from moire.units import fold_angle, lpi_to_lpcm, page_vector


@dataclass(frozen=True, slots=True, kw_only=True)
class ScreenOrder:
    """A screen asked of the press: ruling, angle on the sheet, ink and dot shape."""

    ruling_lpi: float
    angle_deg: float
    ink: str
    spot: Spot = "round"


@dataclass(frozen=True, slots=True, kw_only=True)
class ScreenTruth:
    """A screen as printed and as it lies in the scan.

    ``angle_deg`` is in the scan (the sheet's turn included), ``vectors_cpp`` the two true
    fundamentals in cycles per pixel, ``observed_cpp`` where they fold to, ``order`` how often.
    """

    ink: str
    spot: str
    ruling_lpi: float
    ruling_lpcm: float
    angle_deg: float
    angle_on_sheet_deg: float
    vectors_cpp: tuple[tuple[float, float], ...]
    observed_cpp: tuple[tuple[float, float], ...]
    order: tuple[tuple[int, int], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Truth:
    """What a proof holds, exactly."""

    format: str = "moire.truth"
    version: int = 1
    software: str
    scan: str
    unscreened: str
    width_in: float
    height_in: float
    device_dpi: float
    ppi: tuple[float, float]
    turn_deg: float
    lens_px: float
    aperture_px: float
    noise: float
    jpeg_quality: int | None
    dot_spread_um: float
    dot_gain: float
    seed: int
    kind: Literal["halftone", "cloth"]
    screens: tuple[ScreenTruth, ...]
    ends_per_cm: float | None = None
    picks_per_cm: float | None = None
    weave: str | None = None
    structure: str | None = None
    yarn_jitter: float | None = None
    yarn_thickness: float | None = None
    hair: float | None = None
    skew_deg: float | None = None
    bow: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Proof:
    """Pixels of the scan, of the same scan without its pattern, and the truth."""

    scan: NDArray[np.uint8]
    unscreened: NDArray[np.uint8]
    truth: Truth


def print_sheet(
    picture: NDArray[np.float32],
    screens: tuple[ScreenOrder, ...],
    *,
    width_in: float,
    height_in: float,
    spread_um: float = 20.0,
    gain: float = 0.12,
    seed: int = 0,
) -> Print:
    """A print of a linear-light picture through the given screens, phases drawn from the seed."""
    rng = np.random.default_rng(seed)
    amounts = separate(picture, tuple(s.ink for s in screens))
    layers = tuple(
        InkLayer(
            ink=s.ink, coverage=amounts[s.ink], ruling_lpi=s.ruling_lpi, angle_deg=s.angle_deg, spot=s.spot,
            phase=(float(rng.random()), float(rng.random())),
        )
        for s in screens
    )  # fmt: skip
    return Print(width_in=width_in, height_in=height_in, layers=layers, spread_um=spread_um, gain=gain)


def scan_print(sheet: Print, scanner: Scanner, *, seed: int, name: str, unscreened_name: str) -> Proof:
    """Scan a print, and the same ink amounts without a screen, with the same noise."""
    screened, plain = _scan_both(sheet, replace(sheet, screened=False), scanner, seed)
    truth = _truth(sheet, scanner, seed, name, unscreened_name, "halftone")
    screens = tuple(_screen_truth(layer, scanner) for layer in sheet.layers)
    truth = replace(truth, screens=screens, dot_spread_um=sheet.spread_um, dot_gain=sheet.gain)
    return Proof(scan=screened, unscreened=plain, truth=truth)


def scan_cloth(cloth: Cloth, scanner: Scanner, *, seed: int, name: str, unscreened_name: str) -> Proof:
    """Scan a swatch, and a sheet of its mean colour without threads."""
    woven, plain = _scan_both(cloth, replace(cloth, woven=False), scanner, seed)
    truth = _truth(cloth, scanner, seed, name, unscreened_name, "cloth")
    ends, picks = cloth.true_setts()
    knit = cloth.pattern == KNIT
    truth = replace(
        truth,
        ends_per_cm=ends,
        picks_per_cm=picks,
        weave=KNIT if knit else parse_binding(cloth.pattern).pattern,
        structure="single jersey" if knit else parse_binding(cloth.pattern).structure,
        yarn_jitter=cloth.jitter,
        yarn_thickness=cloth.thickness,
        hair=cloth.hair,
        skew_deg=cloth.skew_deg,
        bow=cloth.bow,
    )
    return Proof(scan=woven, unscreened=plain, truth=truth)


def _scan_both(
    patterned: Sheet, plain: Sheet, scanner: Scanner, seed: int
) -> tuple[NDArray[np.uint8], NDArray[np.uint8]]:
    one = digitise(sample(patterned, scanner), scanner, np.random.default_rng(seed))
    # The reference is what mending should reach: no noise and no codec of its own.
    clean = replace(scanner, noise=0.0, jpeg_quality=None)
    return one, digitise(sample(plain, scanner), clean, np.random.default_rng(seed))


def _truth(
    sheet: Sheet,
    scanner: Scanner,
    seed: int,
    name: str,
    unscreened_name: str,
    kind: Literal["halftone", "cloth"],
) -> Truth:
    return Truth(
        software=f"moire {moire.__version__}",
        scan=name,
        unscreened=unscreened_name,
        width_in=sheet.width_in,
        height_in=sheet.height_in,
        device_dpi=sheet.dpi,
        ppi=scanner.ppi,
        turn_deg=scanner.turn_deg,
        lens_px=scanner.lens_px,
        aperture_px=scanner.aperture_px,
        noise=scanner.noise,
        jpeg_quality=scanner.jpeg_quality,
        dot_spread_um=0.0,
        dot_gain=0.0,
        seed=seed,
        kind=kind,
        screens=(),
    )


def _screen_truth(layer: InkLayer, scanner: Scanner) -> ScreenTruth:
    period = 180 if layer.spot == "line" else 90
    angle = layer.angle_deg + scanner.turn_deg
    turns = (0,) if layer.spot == "line" else (0, 90)
    true = [np.array(page_vector(layer.ruling_lpi, angle + t)) for t in turns]
    folded = [fold(f, scanner.ppi) for f in true]
    rate = np.array(scanner.ppi)

    def cpp(f: NDArray[np.float64]) -> tuple[float, float]:
        return (float(f[0] / rate[0]), float(f[1] / rate[1]))

    return ScreenTruth(
        ink=layer.ink,
        spot=layer.spot,
        ruling_lpi=layer.ruling_lpi,
        ruling_lpcm=lpi_to_lpcm(layer.ruling_lpi),
        angle_deg=fold_angle(angle, period),
        angle_on_sheet_deg=fold_angle(layer.angle_deg, period),
        vectors_cpp=tuple(cpp(f) for f in true),
        observed_cpp=tuple(cpp(alias) for alias, _ in folded),
        order=tuple(order for _, order in folded),
    )
