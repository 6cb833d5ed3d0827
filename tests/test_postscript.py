"""Screens printed by Ghostscript are found, measured and named."""

import numpy as np
import pytest
import skimage.data
from postscript import DEVICE_DPI, needs_ghostscript, plate, scan_plates, truth
from prints import as_scan

from moire.examine import examine
from moire.mend import mend
from moire.units import angle_distance

pytestmark = needs_ghostscript


def tone(name: str) -> np.ndarray:
    data = getattr(skimage.data, name)()
    grey = data if data.ndim == 2 else data @ np.array([0.3, 0.59, 0.11])
    side = min(grey.shape)
    return (1 - (grey[:side, :side] / 255) ** 2.2).astype(np.float32)


@pytest.mark.parametrize(("ruling", "angle"), [(100, 0), (133, 15), (120, 45)])
def test_an_interpreter_prints_a_rational_cell(ruling: float, angle: float) -> None:
    """f = dpi / sqrt(m^2 + n^2) with whole or half m, n: the identity of a cell on the device grid."""
    found, direction = truth(ruling, angle, "round")
    period = DEVICE_DPI / found
    m, n = period * np.cos(np.radians(direction)), period * np.sin(np.radians(direction))
    halves = 2 * np.array([m, n])
    sixteenths = 16 * np.array([m, n])
    assert (
        np.abs(sixteenths - np.rint(sixteenths)).max() < 0.06 or np.abs(halves - np.rint(halves)).max() < 0.02
    )
    assert found == pytest.approx(ruling, rel=0.02)


@pytest.mark.parametrize("ppi", [300, 400, 600])
@pytest.mark.parametrize(
    ("ruling", "angle", "spot", "picture", "turn"),
    [
        (65, 45, "round", "camera", 0.0),
        (85, 15, "ellipse", "coins", 0.7),
        (100, 37, "diamond", "camera", 0.0),
        (120, 75, "round", "moon", -1.2),
        (133, 45, "round", "coffee", 0.0),
        (150, 22, "diamond", "coins", 0.4),
        (175, 45, "round", "camera", 0.0),
    ],
)
def test_one_ink(ruling: float, angle: float, spot: str, picture: str, turn: float, ppi: float) -> None:
    """Ruling within 0.2 %, angle within 0.1 degrees; the truth is measured on the rendered bitmap."""
    printed = plate(tone(picture), ruling, angle, spot=spot)
    found = examine(as_scan(scan_plates({"black": printed}, ppi, turn_deg=turn), ppi))
    screens = [f.screen for f in found.findings if f.screen]
    assert len(screens) == 1
    assert screens[0].ruling_lpi == pytest.approx(printed.ruling_lpi, rel=0.002)
    assert angle_distance(screens[0].angle_deg, printed.angle_deg + turn, 90) < 0.1
    assert screens[0].ink == "black"


def four_inks() -> tuple[dict[str, np.ndarray], dict[str, object]]:
    rgb = (skimage.data.coffee()[:400, 100:500] / 255) ** 2.2
    absorbed = 1 - rgb.astype(np.float32)
    black = 0.7 * np.clip((absorbed.min(axis=2) - 0.2) / 0.8, 0, 1)
    tones = {
        ink: np.clip((absorbed[..., i] - black) / (1 - black), 0, 1).astype(np.float32)
        for i, ink in enumerate(("cyan", "magenta", "yellow"))
    } | {"black": black.astype(np.float32)}
    angles = {"cyan": 15, "magenta": 75, "yellow": 0, "black": 45}
    return tones, {ink: plate(t, 133, angles[ink]) for ink, t in tones.items()}


def test_four_inks_at_133_lpi_and_600_ppi() -> None:
    _, plates = four_inks()
    found = examine(as_scan(scan_plates(plates, 600), 600))  # type: ignore[arg-type]
    screens = {f.screen.ink: f.screen for f in found.findings if f.screen}
    assert sorted(screens) == ["black", "cyan", "magenta", "yellow"]
    assert sum(1 for f in found.findings if f.screen) == 4
    for ink, printed in plates.items():
        assert screens[ink].ruling_lpi == pytest.approx(printed.ruling_lpi, rel=0.002)  # type: ignore[attr-defined]
        assert angle_distance(screens[ink].angle_deg, printed.angle_deg, 90) < 0.1  # type: ignore[attr-defined]


def test_mending_a_true_print_beats_every_gaussian() -> None:
    import cv2

    tones, plates = four_inks()
    scan = as_scan(scan_plates(plates, 300), 300)  # type: ignore[arg-type]
    target = scan_plates(plates, 300, screened=False, tones=tones, noise=0) / 255  # type: ignore[arg-type]

    def psnr(picture: np.ndarray) -> float:
        inner = slice(8, -8)
        return float(-10 * np.log10(np.mean((picture[inner, inner] - target[inner, inner]) ** 2)))

    blurred = scan.pixels.astype(np.float32) / 255
    best = max(psnr(cv2.GaussianBlur(blurred, (0, 0), s)) for s in np.geomspace(0.35, 4, 16))
    assert psnr(mend(scan).scan.pixels / 255) > best + 1
