"""Periodic originals as a scanner meets them: inks and cloth as Fourier coefficients of light.

Lightness is not linear in light and samples are taken before anyone judges them, so lines of
L* are found on the pattern's own cell: light after lens and sensor is summed over one cell,
turned into L* point by point, and transformed back. Sampling commutes with a function of each
point, so these are the lines of the scan wherever its grid folds them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.bindings import parse_binding
from moire.dots import Shape, dot_coefficients
from moire.loom import KNIT, Cloth
from moire.press import INKS, PAPER
from moire.scanner import srgb_decode, srgb_encode

Array = NDArray[np.float64]
Spectra = NDArray[np.complex128]

INK_CELLS, PAIR_CELLS = 32, 8
LUMINANCE = np.array([0.2126, 0.7152, 0.0722])
_SAMPLES_A_THREAD = 16


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pattern:
    """One lattice of an original.

    Attributes
    ----------
    name : str
        In words, as reports call it.
    basis_cpi : ndarray, shape (2, 2)
        The two lattice vectors ``(fx, fy)`` in cycles per inch, fy down, sheet not turned.
    sigma_cpi : float
        Standard uncertainty of a lattice vector's components.
    repeat : int
        Orders are multiples of the vectors over this: 1 for a screen, the weave's repeat for cloth.
    amounts : ndarray, shape (tones, cells, cells)
        Coefficients of ink amount, or of reflectance where there is no ink.
    absorbs : ndarray, shape (3,)
        Share of red, green and blue light that the ink takes; empty for cloth.
    """

    name: str
    basis_cpi: Array
    sigma_cpi: float
    repeat: int
    amounts: Spectra
    absorbs: Array

    @property
    def is_ink(self) -> bool:
        return self.absorbs.size == 3


def ink_pattern(
    name: str,
    ink: str,
    basis_cpi: Array,
    sigma_cpi: float,
    *,
    shape: Shape,
    tones: tuple[float, ...],
    spread_um: float,
) -> Pattern:
    """A printed screen; ink spreads as a Gaussian of `spread_um`, unknown inks count as black."""
    amounts = dot_coefficients(shape, tones, INK_CELLS)
    f = whole_grid(INK_CELLS) @ basis_cpi
    spread = np.exp(-2 * np.pi**2 * (spread_um / 25400) ** 2 * (f**2).sum(axis=-1))
    absorbs = 1 - np.array(INKS.get(ink, INKS["black"]))
    return Pattern(
        name=name, basis_cpi=basis_cpi, sigma_cpi=sigma_cpi, repeat=1, amounts=amounts * spread,
        absorbs=absorbs,
    )  # fmt: skip


def cloth_pattern(
    name: str, weave: str, ends: float, picks: float, skew_deg: float, sigma_cpi: float
) -> Pattern:
    """A cloth of usual yarns, `ends` across and `picks` down the sheet per inch.

    `weave` is a binding's name, or knit.
    """
    repeat = 1 if weave == KNIT else max(parse_binding(weave).repeat)
    cells = repeat * _SAMPLES_A_THREAD
    cloth = Cloth(
        width_in=1, height_in=1, ends_per_cm=1, picks_per_cm=1, pattern=weave, unevenness=0,
        dpi=2.54 * _SAMPLES_A_THREAD,
    )  # fmt: skip
    light = cloth.reflectance(0, 0, cells, cells) @ LUMINANCE
    lean = np.radians(skew_deg)
    across = ends * np.array([np.cos(lean), -np.sin(lean)])
    down = picks * np.array([np.sin(lean), np.cos(lean)])
    return Pattern(
        name=name, basis_cpi=np.stack([across, down]), sigma_cpi=sigma_cpi, repeat=repeat,
        amounts=np.fft.fft2(light, norm="forward")[None], absorbs=np.empty(0),
    )  # fmt: skip


def order_grid(cells: int) -> NDArray[np.int64]:
    """Orders (m, n) with m >= 0 on a cell grid, shape (cells, cells // 2 + 1, 2); m changes along columns.

    The other half is the opposite of these, as for any real picture.
    """
    orders = np.rint(np.fft.fftfreq(cells) * cells).astype(np.int64)
    half = np.arange(cells // 2 + 1)
    return np.stack(np.broadcast_arrays(half[None, :], orders[:, None]), axis=-1)


def whole_grid(cells: int) -> NDArray[np.int64]:
    """All orders (m, n) of a cell grid, shape (cells, cells, 2), as `Pattern.amounts` lays them."""
    orders = np.rint(np.fft.fftfreq(cells) * cells).astype(np.int64)
    return np.stack(np.broadcast_arrays(orders[None, :], orders[:, None]), axis=-1)


def light_of_one(pattern: Pattern) -> Spectra:
    """Coefficients of reflected light of one pattern on paper, shape (tones, cells, cells // 2 + 1)."""
    half = pattern.amounts.shape[-1] // 2 + 1
    if not pattern.is_ink:
        return pattern.amounts[..., :half]
    paper = LUMINANCE * np.array(PAPER)
    light = -float(paper @ pattern.absorbs) * pattern.amounts[..., :half]
    light[:, 0, 0] += paper.sum()
    return light


def light_of_two(first: Pattern, second: Pattern, tones: slice) -> Spectra:
    """Coefficients of light of two inks over each other, shape (tones, n2, m2, n1, half of m1)."""
    paper = LUMINANCE * np.array(PAPER)
    keep = np.rint(np.fft.fftfreq(PAIR_CELLS) * PAIR_CELLS).astype(int)
    at = np.ix_(keep, keep)
    a = np.stack([plane[at] for plane in first.amounts[tones]])[..., : PAIR_CELLS // 2 + 1]
    b = np.stack([plane[at] for plane in second.amounts[tones]])
    none_a, none_b = np.zeros_like(a), np.zeros_like(b)
    none_a[:, 0, 0] = none_b[:, 0, 0] = 1

    def outer(low: Spectra, high: Spectra) -> Spectra:
        return np.asarray(high[:, :, :, None, None] * low[:, None, None])

    light = paper.sum() * outer(none_a, none_b)
    light -= float(paper @ first.absorbs) * outer(a, none_b)
    light -= float(paper @ second.absorbs) * outer(none_a, b)
    return np.asarray(light + float(paper @ (first.absorbs * second.absorbs)) * outer(a, b))


def lines_of_lightness(light: Spectra, axes: tuple[int, ...]) -> tuple[Array, Array]:
    """Amplitude of each line in L*, and the mean L*, from coefficients of sampled light.

    Parameters
    ----------
    light : ndarray, shape (..., cells, cells // 2 + 1)
        Coefficients over the cell axes `axes`, half of the last.

    Returns
    -------
    amplitude : ndarray, like `light`
        Peak swing of the pair of lines at plus and minus each order.
    mean : ndarray, shape (...)
    """
    from scipy import fft

    lightness = lightness_of_light(_over_cell(light, axes))
    swing = 2 * np.abs(fft.rfftn(lightness, axes=axes, norm="forward"))
    return np.asarray(swing), np.asarray(lightness.mean(axis=axes))


def codes_of_light(light: Spectra, axes: tuple[int, ...]) -> Spectra:
    """Coefficients of sRGB code values 0..1 from coefficients of light."""
    from scipy import fft

    return np.asarray(fft.rfftn(srgb_encode(_over_cell(light, axes)), axes=axes, norm="forward"))


def lines_of_codes(codes: Spectra, axes: tuple[int, ...]) -> tuple[Array, Array]:
    """As `lines_of_lightness`, from coefficients of sRGB code values."""
    from scipy import fft

    light = srgb_decode(np.clip(_over_cell(codes, axes), 0, 1))
    return lines_of_lightness(fft.rfftn(light, axes=axes, norm="forward"), axes)


def _over_cell(coefficients: Spectra, axes: tuple[int, ...]) -> Array:
    """The field that coefficients describe, summed over one cell."""
    from scipy import fft

    cells = coefficients.shape[axes[0]]
    return np.asarray(fft.irfftn(coefficients, s=(cells,) * len(axes), axes=axes, norm="forward"))


def lightness_of_light(light: Array) -> Array:
    """CIE 1976 L* of reflected light 0..1."""
    y = np.clip(light, 0, 1)
    return np.where(y > 216 / 24389, 116 * np.cbrt(y) - 16, 24389 / 27 * y)
