"""The scanner integrates, turns and aliases as geometry says."""

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from moire.scanner import Scanner, digitise, sample, srgb_decode, srgb_encode
from moire.units import page_vector


@dataclass(frozen=True)
class Grating:
    """A cosine on a sheet, in lines per inch."""

    lpi: float
    angle_deg: float
    dpi: float = 2400.0
    width_in: float = 1.0
    height_in: float = 1.0

    def reflectance(self, x0: int, y0: int, width: int, height: int) -> NDArray[np.float32]:
        fx, fy = page_vector(self.lpi / self.dpi, self.angle_deg)
        x, y = np.arange(x0, x0 + width) + 0.5, np.arange(y0, y0 + height) + 0.5
        wave = 0.5 + 0.4 * np.cos(2 * np.pi * (fx * x[None, :] + fy * y[:, None]))
        return np.repeat(wave[..., None], 3, axis=2).astype(np.float32)


def amplitude_at(image: NDArray[np.float32], f: tuple[float, float]) -> float:
    rows, columns = image.shape
    window = np.outer(np.hanning(rows), np.hanning(columns))
    ex = np.exp(-2j * np.pi * f[0] * np.arange(columns))
    ey = np.exp(-2j * np.pi * f[1] * np.arange(rows))
    return float(2 * abs(ey @ ((image - image.mean()) * window) @ ex) / window.sum())


@pytest.mark.parametrize(
    ("lpi", "ppi", "mtf"),
    # Source: box aperture of one pixel, MTF = |sinc(f / R)| (transform of the box, textbook).
    [
        (65, 300, 0.924549),
        (85, 300, 0.873082),
        (133, 300, 0.706645),
        (150, 600, 0.900316),
        (150, 200, 0.300105),
    ],
)
def test_box_aperture_passes_what_the_sinc_says(lpi: float, ppi: float, mtf: float) -> None:
    seen = sample(Grating(lpi, 0), Scanner(ppi=(ppi, ppi), lens_px=0, noise=0))[..., 0]
    f = lpi / ppi
    assert amplitude_at(seen, (f - round(f), 0)) / 0.4 == pytest.approx(mtf, abs=0.012)


@pytest.mark.parametrize("turn", [-7.0, 0.0, 3.0, 30.0])
def test_a_turned_sheet_turns_its_screen_counter_clockwise(turn: float) -> None:
    seen = sample(Grating(80, 20), Scanner(ppi=(300, 300), turn_deg=turn, noise=0))[50:250, 50:250, 0]
    expected = amplitude_at(seen, page_vector(80 / 300, 20 + turn))
    mirrored = amplitude_at(seen, page_vector(80 / 300, 20 - turn))
    assert expected > 0.25
    assert turn == 0 or expected > 2 * mirrored


def test_each_axis_has_its_own_rate() -> None:
    seen = sample(Grating(60, 45), Scanner(ppi=(300, 200), noise=0))
    assert seen.shape == (200, 300, 3)
    fx, fy = page_vector(60, 45)
    assert amplitude_at(seen[..., 0], (fx / 300, fy / 200)) > 0.25


def test_tiles_of_the_sampling_join_without_a_seam() -> None:
    scanner = Scanner(ppi=(300, 300), turn_deg=2, noise=0)
    seen = sample(Grating(50, 10), scanner)[..., 0]
    steps = np.abs(np.diff(seen, axis=1)).max(axis=0)
    assert steps[255] < 1.1 * np.delete(steps, 255).max()


def test_srgb_curve() -> None:
    """Source: IEC 61966-2-1, linear 0.5 encodes to 0.735357 and 0.0031308 joins the two parts."""
    assert srgb_encode(np.array([0.0, 0.5, 1.0])) == pytest.approx([0, 0.735357, 1], abs=1e-5)
    codes = np.linspace(0, 1, 256)
    assert srgb_encode(srgb_decode(codes)) == pytest.approx(codes, abs=1e-5)


def test_noise_is_drawn_from_the_seed() -> None:
    grey = np.full((40, 40, 3), 0.2, np.float32)
    scanner = Scanner(ppi=(300, 300), noise=0.02)
    one, same, other = (digitise(grey, scanner, np.random.default_rng(s)) for s in (1, 1, 2))
    assert (one == same).all()
    assert (one != other).any()
    assert one.std() / 255 == pytest.approx(0.02, rel=0.1)


def test_jpeg_changes_little_and_keeps_the_shape() -> None:
    grey = np.full((40, 48, 3), (0.2, 0.3, 0.4), np.float32)
    clean = digitise(grey, Scanner(ppi=(300, 300), noise=0), np.random.default_rng(0))
    coded = digitise(grey, Scanner(ppi=(300, 300), noise=0, jpeg_quality=85), np.random.default_rng(0))
    assert coded.shape == clean.shape
    assert np.abs(coded.astype(int) - clean).max() <= 3
