"""How visible a pattern is: Barten's contrast sensitivity at a stated viewing condition.

One model is used throughout and named in every report; other models disagree on the peak
and must not be mixed in one threshold.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from moire.model import Viewing

MODEL = "Barten 1999, 100 cd/m2, 10 degree field"
MONITOR_PPI = 110.0
MONITOR_MM = 500.0
PRINT_MM = 350.0


def viewing_condition(condition: str) -> Viewing:
    """The stated condition: ``monitor`` shows pixels 1:1, ``print`` the original's size in the hand."""
    if condition == "print":
        return Viewing(condition="print", distance_mm=PRINT_MM, monitor_ppi=MONITOR_PPI, model=MODEL)
    return Viewing(condition="monitor", distance_mm=MONITOR_MM, monitor_ppi=MONITOR_PPI, model=MODEL)


def contrast_sensitivity(
    u: float,
    *,
    luminance: float = 100.0,
    field_deg: float = 10.0,
    sigma_arcmin: float | None = None,
    retinal_td: float | None = None,
) -> float:
    """Sensitivity (1 / threshold modulation) at `u` cycles per degree.

    Parameters
    ----------
    u : float
        Cycles per degree, > 0.
    luminance : float
        cd/m2 of the adapting field.
    field_deg : float
        Side of the square field.
    sigma_arcmin, retinal_td : float or None
        Optical spread and retinal illuminance; from the pupil at `luminance` if None.

    Notes
    -----
    P. G. J. Barten, Contrast Sensitivity of the Human Eye (SPIE, 1999), with his constants.
    """
    pupil = 5 - 3 * math.tanh(0.4 * math.log(luminance * field_deg**2 / 40**2))
    sigma = math.hypot(0.5, 0.08 * pupil) if sigma_arcmin is None else sigma_arcmin
    if retinal_td is None:
        area = math.pi * pupil**2 / 4 * luminance
        retinal_td = area * (1 - (pupil / 9.7) ** 2 + (pupil / 12.4) ** 4)
    optics = math.exp(-2 * math.pi**2 * (sigma / 60) ** 2 * u**2)
    integration = 1 / field_deg**2 + 1 / 12**2 + u**2 / 15**2
    photon_noise = 1 / (0.03 * 1.2274e6 * retinal_td)
    neural_noise = 3e-8 / (1 - math.exp(-((u / 7) ** 2)))
    return optics / (3 * math.sqrt(2 / 0.1 * integration * (photon_noise + neural_noise)))


@lru_cache(maxsize=1)
def _sensitivity_table() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    u = np.geomspace(0.1, 120, 600)
    return np.log(u), np.log([max(contrast_sensitivity(float(v)), 1e-12) for v in u])


def contrast_sensitivities(u: NDArray[np.float64]) -> NDArray[np.float64]:
    """`contrast_sensitivity` of many frequencies, from 0.1 cycles per degree up, to 0.01 %."""
    at, value = _sensitivity_table()
    return np.asarray(np.exp(np.interp(np.log(np.maximum(u, 0.1)), at, value)))


def cycles_per_degree(frequency_per_mm: float, distance_mm: float) -> float:
    """Frequency on a surface to cycles per degree of visual angle."""
    return frequency_per_mm * 2 * distance_mm * math.tan(math.radians(0.5))


def visibility(
    f_cpp: tuple[float, float],
    amplitude: float,
    mean_lightness: float,
    *,
    viewing: Viewing,
    ppi: tuple[float, float] | None,
) -> float:
    """Contrast of a line over the eye's threshold; 1 is just visible.

    Parameters
    ----------
    f_cpp : (float, float)
        Cycles per pixel.
    amplitude, mean_lightness : float
        L* swing and mean L* where the pattern is.
    viewing : Viewing
        ``print`` needs a known ppi; without one the pixels are judged as on the monitor.
    ppi : (float, float) or None
    """
    if viewing.condition == "print" and ppi is not None:
        per_mm = math.hypot(f_cpp[0] * ppi[0], f_cpp[1] * ppi[1]) / 25.4
    else:
        per_mm = math.hypot(*f_cpp) * viewing.monitor_ppi / 25.4
    u = max(cycles_per_degree(per_mm, viewing.distance_mm), 0.1)
    # dY/Y = 3 dL*/(L* + 16) from the CIE 1976 definition of L*.
    modulation = min(1.0, 3 * amplitude / (mean_lightness + 16))
    return modulation * contrast_sensitivity(u)


def lightness(rgb: NDArray[np.uint8] | NDArray[np.floating]) -> NDArray[np.float32]:
    """CIE 1976 L* of sRGB code values on a 0..255 scale, shape (..., channels) or (rows, columns)."""
    light = linear_light(rgb if rgb.ndim > 2 else rgb[..., None])
    weights = (0.2126, 0.7152, 0.0722) if light.shape[-1] == 3 else (1.0,)
    y = np.asarray(light @ np.array(weights, np.float32))
    # The cube root by logarithms, which run on all lanes of the processor.
    root = np.exp(np.log(np.maximum(y, np.float32(1e-6))) / np.float32(3))
    return np.where(y > 216 / 24389, 116 * root - 16, np.float32(24389 / 27) * y)


def linear_light(codes: NDArray[np.uint8] | NDArray[np.floating]) -> NDArray[np.float32]:
    """Linear light 0..1 of sRGB code values on a 0..255 scale, same shape."""
    if codes.dtype == np.uint8:
        return _light_table(255)[codes]
    steps = 4096
    return _light_table(steps)[np.rint(np.clip(codes, 0, 255) * (steps / 255)).astype(np.uint16)]


@lru_cache(maxsize=2)
def _light_table(steps: int) -> NDArray[np.float32]:
    """Linear light of equally spaced sRGB values 0..1 (IEC 61966-2-1)."""
    table = np.arange(steps + 1, dtype=np.float32) / steps
    return np.where(table <= 0.04045, table / 12.92, ((table + 0.055) / 1.055) ** 2.4).astype(np.float32)
