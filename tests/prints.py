"""Small prints through the product's own press and scanner, for tests of what reads them."""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.model import Scan
from moire.press import Print
from moire.proof import ScreenOrder, print_sheet
from moire.scanner import Scanner, digitise, sample, srgb_encode
from moire.testcard import draw_card


def as_scan(pixels: NDArray[np.uint8], ppi: float | tuple[float, float] | None, **more: object) -> Scan:
    """Pixels as a scan with a stated rate."""
    rate = (ppi, ppi) if isinstance(ppi, int | float) else ppi
    mode = "rgb" if pixels.ndim == 3 else "grey"
    return Scan(
        pixels=pixels,
        mode=mode,
        bit_depth=8,
        ppi=rate,
        ppi_source=rate and "option",
        name="print.png",
        **more,
    )  # type: ignore[arg-type]


def card_print(*orders: ScreenOrder, width_in: float = 1.5, seed: int = 3, **more: float) -> Print:
    """The harbour card through the given screens."""
    card = draw_card(600, 450) ** 2.2
    return print_sheet(
        card.astype(np.float32), orders, width_in=width_in, height_in=0.75 * width_in, seed=seed, **more
    )


def scanned(
    sheet: Print, ppi: float | tuple[float, float], **optics: object
) -> tuple[Scan, NDArray[np.float32]]:
    """A scan of a print and the sRGB picture that it would show without a screen, 0..1."""
    rate = (ppi, ppi) if isinstance(ppi, int | float) else ppi
    scanner = Scanner(ppi=rate, **optics)  # type: ignore[arg-type]
    pixels = digitise(sample(sheet, scanner), scanner, np.random.default_rng(1))
    plain = srgb_encode(sample(replace(sheet, screened=False), scanner)).astype(np.float32)
    return as_scan(pixels, rate, jpeg=scanner.jpeg_quality is not None), plain


FOUR_INKS = (
    ScreenOrder(ruling_lpi=133, angle_deg=18, ink="cyan"),
    ScreenOrder(ruling_lpi=133, angle_deg=77, ink="magenta"),
    ScreenOrder(ruling_lpi=141, angle_deg=2, ink="yellow"),
    ScreenOrder(ruling_lpi=133, angle_deg=47, ink="black"),
)
