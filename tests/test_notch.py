"""Lines go, pictures stay, nothing rings."""

import numpy as np
import pytest
import skimage.data
from numpy.typing import NDArray

from moire.notch import remove_lines


def photograph() -> NDArray[np.float32]:
    return (skimage.data.coffee()[:384, :384] / 255).astype(np.float32)


def psnr(a: NDArray[np.float32], b: NDArray[np.float32]) -> float:
    return float(-10 * np.log10(np.mean((a - b) ** 2)))


def waves(f: tuple[float, float], amplitude_codes: float) -> NDArray[np.float32]:
    y, x = np.mgrid[0:384, 0:384]
    wave = amplitude_codes / 255 * np.cos(2 * np.pi * (f[0] * x + f[1] * y) + 1)
    return np.repeat(wave[..., None], 3, axis=2).astype(np.float32)


@pytest.mark.parametrize("f", [(0.0, 0.0917), (0.1173, 0.0), (0.061, 0.083)])
def test_a_line_on_a_photograph_is_removed(f: tuple[float, float]) -> None:
    clean = photograph()
    spoilt = clean + waves(f, 4)
    mended = remove_lines(spoilt, [f])
    assert psnr(spoilt, clean) < 40
    assert psnr(mended, clean) > psnr(spoilt, clean) + 8


@pytest.mark.parametrize("name", ["rocket", "astronaut"])
@pytest.mark.parametrize(
    ("lines", "swing", "share"),
    [
        ([(0.0, 0.0917), (0.0, 0.1834)], 3, False),
        ([(0.061, 0.043)], 4, False),
        ([(0.052, -0.061)], 5, True),
    ],
    ids=["banding", "beat", "beat of a weave"],
)
def test_a_line_under_noise_goes_and_the_photograph_stays(
    name: str, lines: list[tuple[float, float]], swing: float, share: bool
) -> None:
    """One code of noise and rounding alone hold the PSNR at 47.8 dB."""
    truth = (getattr(skimage.data, name)()[:300, :300] / 255).astype(np.float32)
    y, x = np.mgrid[:300, :300]
    wave = sum(np.cos(2 * np.pi * (f[0] * x + f[1] * y) + 1) for f in lines) * swing
    spoilt = truth * (1 + wave[..., None] / 128) if share else truth + wave[..., None] / 255
    noisy = spoilt + np.random.default_rng(5).normal(0, 1 / 255, truth.shape)
    scan = np.clip(np.rint(noisy * 255) / 255, 0, 1).astype(np.float32)
    mended = remove_lines(scan, lines, of_tone=share)
    assert psnr(np.clip(mended, 0, 1), truth) >= 46
    window = np.hanning(300)[:, None] * np.hanning(300)
    for f in lines:
        carrier = window * np.exp(-2j * np.pi * (f[0] * x + f[1] * y))
        before, after = (abs(((p - truth).mean(axis=2) * carrier).sum()) for p in (scan, mended))
        assert 20 * np.log10(before / after) >= 20


def test_an_untouched_photograph_hardly_changes() -> None:
    clean = photograph()
    assert psnr(remove_lines(clean, [(0.0, 0.0917)]), clean) > 50


def test_a_step_edge_does_not_ring() -> None:
    page = np.full((256, 256, 1), 0.9, np.float32)
    page[:, 128:] = 0.1
    assert np.abs(remove_lines(page, [(0.09, 0.0)]) - page).max() < 2 / 255


def test_no_lines_no_change() -> None:
    page = photograph()
    assert remove_lines(page, []) is page


def test_a_line_named_twice_goes_once() -> None:
    """Two names for one line, closer than an amplitude that may change can tell, are one line."""
    clean = photograph()
    spoilt = clean + waves((0.061, 0.083), 4)
    once, twice = (remove_lines(spoilt, [(0.061, 0.083), (0.0613, 0.083)][:n]) for n in (1, 2))
    assert np.array_equal(once, twice)


def test_a_line_that_stays_is_fitted_beside() -> None:
    clean = photograph()
    kept = clean + waves((0.061, 0.083), 6)
    mended = remove_lines(kept + waves((0.08, 0.083), 3), [(0.08, 0.083)], beside=[(0.061, 0.083)])
    assert psnr(mended, kept) > 45
