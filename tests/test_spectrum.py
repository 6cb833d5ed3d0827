"""Tapers, tiled spectra and tile phasors."""

import numpy as np
import pytest

from moire.spectrum import hann, tile_phasors, tile_spectrum


def test_hann_window_figures() -> None:
    """Source: Harris, Proc. IEEE 66 (1978) 51, table 1 (value from memory): 0.50, 1.50 bins, 1.42 dB."""
    w = hann(1024).astype(float)
    assert w.mean() == pytest.approx(0.5, abs=1e-6)
    assert 1024 * (w**2).sum() / w.sum() ** 2 == pytest.approx(1.5, abs=1e-4)
    half_bin = abs((w * np.exp(-1j * np.pi * np.arange(1024) / 1024)).sum()) / w.sum()
    assert -20 * np.log10(half_bin) == pytest.approx(1.4236, abs=1e-3)


def test_log_spectrum_of_noise_is_flat_at_its_level() -> None:
    """ln of an exponential variable: mean ln(sigma^2) - 0.5772, standard deviation 1.2825 (pi / sqrt 6)."""
    noise = np.random.default_rng(0).normal(0, 5, (512, 512)).astype(np.float32)
    spectrum = tile_spectrum(noise, size=64, pitch=64)
    level = spectrum.mean[8:24, 8:24]
    assert spectrum.tiles == 64
    assert level.mean() == pytest.approx(np.log(25) - 0.5772, abs=0.05)
    assert level.std() == pytest.approx(1.2825 / 8, rel=0.25)


def test_full_plane_is_symmetric() -> None:
    noise = np.random.default_rng(0).normal(0, 5, (256, 256)).astype(np.float32)
    plane = tile_spectrum(noise, size=64, pitch=32).mean
    back = (-np.arange(64)) % 64
    assert np.allclose(plane, plane[back][:, back])


def test_blank_page_has_no_tiles() -> None:
    assert tile_spectrum(np.full((256, 256), 255, np.float32), size=64, pitch=64).tiles == 0


@pytest.mark.parametrize("f", [(0.21, 0.083), (-0.31, 0.4), (0.5, 0.02)])
def test_phasor_is_amplitude_and_phase(f: tuple[float, float]) -> None:
    y, x = np.mgrid[0:320, 0:256]
    wave = 100 + 7 * np.cos(2 * np.pi * (f[0] * x + f[1] * y) + 0.6)
    v, cx, cy = tile_phasors(wave.astype(np.float32), np.array([f]), size=64)
    assert v.shape == (1, 9, 7)
    assert (len(cy), len(cx)) == (9, 7)
    if f[0] != 0.5:
        assert np.abs(v) == pytest.approx(7, rel=2e-3)
        assert np.angle(v) == pytest.approx(0.6, abs=3e-3)
