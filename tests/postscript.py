"""True halftones: plates screened by Ghostscript, a general PostScript interpreter, and scanned here.

Nothing of the product's press or scanner is used. An interpreter rounds each screen to a cell of
the device grid, and may print the mirrored angle, so the truth is measured on a flat tint of the
same screen: the strongest line on the whole ring around the ruling asked for.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

SPOTS = {
    "round": "{180 mul cos exch 180 mul cos add 2 div}",
    "ellipse": "{180 mul cos 0.65 mul exch 180 mul cos add 1.65 div}",
    "diamond": "{abs exch abs add 1 exch sub}",
    "line": "{pop 180 mul cos}",
}
# Linear RGB transmittance of solids on coated paper (ISO 12647-2 solid colours, value from memory).
SOLIDS = {
    "cyan": (0.03, 0.34, 0.78),
    "magenta": (0.63, 0.03, 0.20),
    "yellow": (0.96, 0.79, 0.05),
    "black": (0.02, 0.02, 0.025),
}
DEVICE_DPI = 2400

needs_ghostscript = pytest.mark.skipif(
    shutil.which("gs") is None and not os.environ.get("CI"), reason="Ghostscript (gs) is not installed"
)


@dataclass(frozen=True)
class Plate:
    """One ink as printed: where ink is, and the ruling and angle that the interpreter made of it."""

    ink: NDArray[np.float32]
    ruling_lpi: float
    angle_deg: float


def plate(
    tone: NDArray[np.float32], ruling: float, angle: float, *, spot: str = "round", side_in: float = 1.5
) -> Plate:
    """Print a square of ink amounts 0..1 through one screen."""
    true_ruling, true_angle = truth(ruling, angle, spot)
    return Plate(_render(tone, ruling, angle, spot, side_in), true_ruling, true_angle)


@cache
def truth(ruling: float, angle: float, spot: str) -> tuple[float, float]:
    """Ruling and angle really rendered, from a flat half-tone tint."""
    ink = _render(np.full((2, 2), 0.5, np.float32), ruling, angle, spot, 1.0)
    n = ink.shape[0]
    window = np.outer(np.blackman(n), np.blackman(n)).astype(np.float32)
    power = np.abs(np.fft.fft2((ink - ink.mean()) * window))
    f = np.fft.fftfreq(n, 1 / DEVICE_DPI)
    radius = np.hypot(f[:, None], f[None, :])
    power[(radius < 0.93 * ruling) | (radius > 1.07 * ruling)] = 0
    row, column = np.unravel_index(int(power.argmax()), power.shape)
    k = np.array([f[column], f[row]]) / DEVICE_DPI
    at = np.arange(n)
    data = ((ink - ink.mean()) * window).astype(np.complex64)

    def level(k: NDArray[np.float64]) -> float:
        return float(np.abs(np.exp(-2j * np.pi * k[1] * at) @ data @ np.exp(-2j * np.pi * k[0] * at)))

    step = 0.25 / n
    for _ in range(14):
        for axis in np.eye(2):
            low, mid, high = (level(k + s * step * axis) for s in (-1, 0, 1))
            bend = low - 2 * mid + high
            k = k + axis * float(np.clip(0.5 * (low - high) / bend if bend < 0 else 0, -1, 1)) * step
        step *= 0.6
    measured = np.degrees(np.arctan2(-k[1], k[0])) % (180 if spot in ("line", "ellipse") else 90)
    return float(np.hypot(*k) * DEVICE_DPI), float(measured)


def scan_plates(
    plates: dict[str, Plate],
    ppi: float,
    *,
    turn_deg: float = 0.0,
    screened: bool = True,
    tones: dict[str, NDArray[np.float32]] | None = None,
    noise: float = 0.004,
    seed: int = 0,
    gain_um: float = 25.0,
    lens_px: float = 0.3,
) -> NDArray[np.uint8]:
    """sRGB 8-bit scan: ink spread, product of inks, turn, lens, one-pixel box, sampling, noise.

    With ``screened=False`` the ink amounts in `tones` are laid without a screen.
    """
    side = next(iter(plates.values())).ink.shape[0]
    page = np.full((side, side, 3), 0.88, np.float32)
    for name, printed in plates.items():
        ink = printed.ink
        if not screened and tones is not None:
            ink = cv2.resize(tones[name], (side, side), interpolation=cv2.INTER_LINEAR)
        spread = cv2.GaussianBlur(ink, (0, 0), gain_um / 25400 * DEVICE_DPI)
        page *= 1 - spread[..., None] * (1 - np.float32(SOLIDS[name]))
    pitch = DEVICE_DPI / ppi
    page = cv2.GaussianBlur(page, (0, 0), lens_px * pitch)
    page = _box(page, pitch)
    count = int(side / pitch)
    x, y = np.meshgrid(np.arange(count), np.arange(count))
    turn = np.radians(turn_deg)
    dx, dy = (x + 0.5 - count / 2) * pitch, (y + 0.5 - count / 2) * pitch
    at_x = np.cos(turn) * dx - np.sin(turn) * dy + side / 2 - 0.5
    at_y = np.sin(turn) * dx + np.cos(turn) * dy + side / 2 - 0.5
    linear = cv2.remap(
        page,
        at_x.astype(np.float32),
        at_y.astype(np.float32),
        cv2.INTER_LANCZOS4,
        borderMode=cv2.BORDER_REPLICATE,
    )
    linear = np.clip(linear, 0, 1)
    encoded = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    encoded = encoded + np.random.default_rng(seed).normal(0, noise, encoded.shape)
    return np.clip(np.rint(encoded * 255), 0, 255).astype(np.uint8)


def _box(page: NDArray[np.float32], pitch: float) -> NDArray[np.float32]:
    half = int(np.ceil(pitch / 2))
    kernel = np.clip(pitch / 2 + 0.5 - np.abs(np.arange(-half, half + 1)), 0, 1)
    kernel /= kernel.sum()
    return cv2.sepFilter2D(page, -1, kernel, kernel)


def _render(
    tone: NDArray[np.float32], ruling: float, angle: float, spot: str, side_in: float
) -> NDArray[np.float32]:
    rows, columns = tone.shape
    grey = np.clip(np.rint(255 * (1 - tone)), 0, 255).astype(np.uint8)
    points = 72 * side_in
    with tempfile.TemporaryDirectory() as folder:
        program, out = Path(folder) / "plate.ps", Path(folder) / "plate.pbm"
        program.write_text(
            f"%!PS\n<< /PageSize [{points} {points}] >> setpagedevice\n"
            f"<< /AccurateScreens true >> setuserparams\n{ruling} {angle} {SPOTS[spot]} setscreen\n"
            f"{points} {points} scale\n{columns} {rows} 8 [{columns} 0 0 -{rows} 0 {rows}]\n"
            f"currentfile /ASCIIHexDecode filter image\n{grey.tobytes().hex()}>\nshowpage\n"
        )
        subprocess.run(
            ["gs", "-q", "-dSAFER", "-dBATCH", "-dNOPAUSE", "-sDEVICE=pbmraw", f"-r{DEVICE_DPI}",
             f"-sOutputFile={out}", str(program)],
            check=True, capture_output=True, timeout=120,
        )  # fmt: skip
        return (cv2.imread(str(out), cv2.IMREAD_GRAYSCALE) < 128).astype(np.float32)
