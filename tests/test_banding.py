"""Scanner banding too faint for tiles, seen by the whole page."""

import numpy as np
import pytest
import skimage.data
from hypothesis import given
from hypothesis import strategies as st

from moire.banding import find_bands
from moire.blocks import find_block_grid

PHOTOGRAPH = skimage.data.camera()


def banded(period: float, amplitude: float, axis: int) -> np.ndarray:
    at = np.arange(512)[:, None] if axis else np.arange(512)[None, :]
    rng = np.random.default_rng(2)
    page = PHOTOGRAPH + amplitude * np.cos(2 * np.pi * at / period) + rng.normal(0, 1, (512, 512))
    return np.clip(np.rint(page), 0, 255).astype(np.float32)


@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("period", [3.7, 9.3, 16.1])
def test_banding_of_two_codes_is_found_with_its_period(period: float, axis: int) -> None:
    band = find_bands(banded(period, 2.0, axis))[0]
    assert band.axis == axis
    assert band.f_cpp == pytest.approx(1 / period, abs=max(4 * band.sigma_cpp, 2e-4))
    # Busy places clip the step, so the swing is read a little low.
    assert 1.1 < band.amplitude < 2.4


@pytest.mark.parametrize("name", ["camera", "moon", "gravel", "astronaut"])
def test_photographs_have_no_banding(name: str) -> None:
    picture = getattr(skimage.data, name)()
    mixed = picture if picture.ndim == 2 else picture.mean(axis=2)
    assert find_bands(np.ascontiguousarray(mixed, dtype=np.float32)) == ()


def test_a_page_too_short_for_a_period_has_no_bands() -> None:
    assert find_bands(np.zeros((64, 64), np.float32)) == ()


def coded(quality: int, scale: int = 1) -> np.ndarray:
    import cv2

    code = cv2.imencode(".jpg", PHOTOGRAPH, [cv2.IMWRITE_JPEG_QUALITY, quality])[1]
    pixels = cv2.imdecode(code, cv2.IMREAD_GRAYSCALE).astype(np.float32)
    return cv2.resize(pixels, None, fx=scale, fy=scale, interpolation=cv2.INTER_CUBIC)


@pytest.mark.parametrize(("quality", "scale"), [(60, 1), (80, 1), (60, 2)])
def test_blocks_of_a_codec_are_found_in_place_and_doubled(quality: int, scale: int) -> None:
    """Blocks are 8 x 8 samples (ISO/IEC 10918-1), their first edge at the picture's own."""
    grid = find_block_grid(coded(quality, scale))
    assert grid is not None
    assert grid.period_px == 8 * scale


@given(st.floats(0.5, 1.6))
def test_resampling_alone_is_no_block_grid(scale: float) -> None:
    import cv2

    resized = cv2.resize(
        PHOTOGRAPH.astype(np.float32), None, fx=scale, fy=scale, interpolation=cv2.INTER_LINEAR
    )
    assert find_block_grid(resized) is None
