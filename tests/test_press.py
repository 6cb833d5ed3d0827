"""The press prints the lattice and the tone it was asked for."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import j1

from moire.errors import BadRequest
from moire.press import INKS, SPOTS, InkLayer, Print, separate
from moire.units import page_vector


def tint(share: float, **kw: object) -> Print:
    layer = InkLayer(
        ink="black", coverage=np.full((8, 8), share, np.float32), ruling_lpi=100, angle_deg=0, **kw
    )  # type: ignore[arg-type]
    return Print(
        width_in=1, height_in=1, layers=(layer,), dpi=9600, spread_um=0, gain=0, paper=(1.0, 1.0, 1.0)
    )


def ink_of(sheet: Print, cells: int = 10) -> np.ndarray:
    """Ink indicator over whole cells of a 100 lpi screen at 9600 dpi (96 px a cell)."""
    n = 96 * cells
    return (1 - sheet.reflectance(960, 960, n, n)[..., 0]) / (1 - INKS["black"][0])


@pytest.mark.parametrize("spot", SPOTS)
@pytest.mark.parametrize("share", [0.1, 0.25, 0.5, 0.75, 0.9])
def test_a_tint_covers_its_share(spot: str, share: float) -> None:
    assert ink_of(tint(share, spot=spot)).mean() == pytest.approx(share, abs=0.012)


@pytest.mark.parametrize(
    ("share", "c10", "c11", "c20"),
    # Source: Fourier coefficients of a disc on a unit cell, c = r J1(2 pi r q) / q, r = sqrt(a / pi)
    # (transform of the disc, textbook; figures computed from it).
    [(0.10, 0.085093, 0.071707, 0.049033), (0.25, 0.163867, 0.098828, 0.016720)],
)
def test_small_round_dots_have_the_spectrum_of_discs(
    share: float, c10: float, c11: float, c20: float
) -> None:
    r = np.sqrt(share / np.pi)
    assert r * j1(2 * np.pi * r) == pytest.approx(c10, abs=1e-6)
    spectrum = np.abs(np.fft.fft2(ink_of(tint(share)), norm="forward"))
    # cos + cos is a disc only near its top: room for its squarer dot at a quarter tone.
    assert spectrum[0, 10] == pytest.approx(c10, abs=0.004)
    assert spectrum[10, 10] == pytest.approx(c11, abs=0.006)
    assert spectrum[0, 20] == pytest.approx(c20, abs=0.012)


def test_line_screen_at_half_tone() -> None:
    """Source: square wave, first coefficient 1/pi = 0.318310, no second (textbook)."""
    spectrum = np.abs(np.fft.fft2(ink_of(tint(0.5, spot="line")), norm="forward"))
    assert spectrum[0, 10] == pytest.approx(0.318310, abs=0.003)
    assert spectrum[0, 20] == pytest.approx(0, abs=0.005)
    assert spectrum[10, 0] == pytest.approx(0, abs=0.005)


@pytest.mark.parametrize(("ruling", "angle"), [(133.0, 15.0), (87.3, 52.4), (150.0, 75.0)])
def test_printed_lattice_is_the_one_asked_for(ruling: float, angle: float) -> None:
    sheet = replace(tint(0.4), dpi=2400.0)
    sheet = replace(sheet, layers=(replace(sheet.layers[0], ruling_lpi=ruling, angle_deg=angle),))
    ink = sheet.reflectance(0, 0, 2400, 2400)[..., 0]
    window = np.outer(np.hanning(2400), np.hanning(2400))
    f = np.array(page_vector(ruling / 2400, angle))

    def level(at: np.ndarray) -> float:
        ex, ey = (np.exp(-2j * np.pi * at[i] * np.arange(2400)) for i in (0, 1))
        return float(abs(ey @ (ink * window) @ ex))

    steps = [level(f + d * f / np.hypot(*f)) for d in (-2e-5, 0, 2e-5)]
    across = [level(f + d * np.array([f[1], -f[0]]) / np.hypot(*f)) for d in (-2e-5, 0, 2e-5)]
    assert steps[1] > max(steps[0], steps[2])
    assert across[1] > max(across[0], across[2])


def test_windows_join_without_a_seam() -> None:
    sheet = replace(tint(0.4), spread_um=20.0, dpi=2400.0)
    whole = sheet.reflectance(0, 0, 200, 100)
    left, right = sheet.reflectance(0, 0, 120, 100), sheet.reflectance(120, 0, 80, 100)
    assert np.allclose(whole, np.concatenate([left, right], axis=1), atol=1e-5)


def test_unscreened_print_has_the_same_mean_ink() -> None:
    rng = np.random.default_rng(0)
    grey = np.clip(0.5 + 0.2 * rng.standard_normal((6, 6)), 0.1, 0.9).astype(np.float32)
    sheet = Print(
        width_in=1,
        height_in=1,
        layers=(InkLayer(ink="black", coverage=grey, ruling_lpi=120, angle_deg=45),),
    )
    screened = sheet.reflectance(0, 0, 2400, 2400).mean()
    plain = replace(sheet, screened=False).reflectance(0, 0, 2400, 2400).mean()
    assert screened == pytest.approx(plain, rel=0.01)


def test_separation_of_primaries() -> None:
    patches = np.array([[[0, 1, 1], [1, 0, 1], [1, 1, 0], [0, 0, 0], [1, 1, 1]]], np.float32)
    amounts = separate(patches, ("cyan", "magenta", "yellow", "black"))
    assert amounts["cyan"][0, :3] == pytest.approx([1, 0, 0])
    assert amounts["magenta"][0, :3] == pytest.approx([0, 1, 0])
    assert amounts["yellow"][0, :3] == pytest.approx([0, 0, 1])
    assert amounts["black"][0, 3] > 0.85
    assert all(a[0, 4] == 0 for a in amounts.values())


def test_an_unknown_ink_is_named() -> None:
    with pytest.raises(BadRequest, match="gold"):
        separate(np.ones((2, 2), np.float32), ("gold",))
