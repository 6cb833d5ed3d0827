"""Resampling kernels, against what the libraries themselves do to a sinusoid."""

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray
from PIL import Image

from moire.kernels import IMAGES, KERNELS, Kernel, image_responses

WIDTH = 1920
OPENCV = {
    "nearest": cv2.INTER_NEAREST, "area": cv2.INTER_AREA, "linear": cv2.INTER_LINEAR,
    "cubic": cv2.INTER_CUBIC, "lanczos4": cv2.INTER_LANCZOS4,
}  # fmt: skip


def resized(row: NDArray[np.float32], width: int, kernel: str) -> NDArray[np.float32]:
    library, name = kernel.split("-")
    picture = np.repeat(row[None], 8, axis=0)
    if library == "opencv":
        return np.asarray(cv2.resize(picture, (width, 8), interpolation=OPENCV[name])[0], np.float32)
    method = Image.Resampling[name.upper()]
    return np.asarray(Image.fromarray(picture).resize((width, 8), method), np.float32)[0]


@pytest.mark.parametrize("width", [960, 640, 1280, 723, 480])
@pytest.mark.parametrize("kernel", KERNELS)
def test_line_and_images_come_out_as_the_library_makes_them(kernel: Kernel, width: int) -> None:
    """Oracle: OpenCV and Pillow. The line at f and its images at f +- 1 cycle per input pixel."""
    ratio = WIDTH / width
    place = np.arange(width) * ratio + (0 if kernel == "opencv-nearest" else 0.5 * ratio - 0.5)
    window = np.hanning(width - 40)
    for f in (0.07, 0.21, 0.33, 0.46):
        cosine, sine = (np.cos(2 * np.pi * (f * np.arange(WIDTH) - p)).astype(np.float32) for p in (0, 0.25))
        made = resized(cosine, width, kernel) + 1j * resized(sine, width, kernel)
        response = [complex(image_responses(kernel, ratio)(np.array([f]), j)[0]) for j in IMAGES]
        model = sum(a * np.exp(2j * np.pi * (f + j) * place) for j, a in zip(IMAGES, response, strict=True))
        for j in IMAGES:
            wave = np.exp(-2j * np.pi * (f + j) * place)
            got, foretold = (
                abs(np.sum((signal * wave)[20:-20] * window) / window.sum()) for signal in (made, model)
            )
            assert got == pytest.approx(foretold, abs=5e-3)


def test_a_whole_reduction_by_area_is_a_box() -> None:
    """Mean of n pixels: sin(pi n f) / (n sin(pi f)), the Dirichlet kernel (textbook)."""
    f = np.array([0.05, 0.11, 0.3])
    found = image_responses("opencv-area", 4.0)(f, 0)
    assert np.abs(found) == pytest.approx(np.abs(np.sin(4 * np.pi * f) / (4 * np.sin(np.pi * f))), abs=1e-3)
