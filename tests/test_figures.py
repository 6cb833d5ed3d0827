"""Figures show pixels as they are, reduce without a pattern of their own, and mark what was found."""

import base64

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

from moire.figures import (
    CROP_PX,
    Mark,
    Picture,
    crop,
    crop_box,
    labels,
    overview,
    shown_rgb,
    spectrum_figures,
)
from moire.model import Finding, Kind, Line, Scan
from moire.scanner import srgb_decode


def _pixels(picture: Picture) -> NDArray[np.uint8]:
    code = np.frombuffer(base64.b64decode(picture.uri.split(",")[1]), np.uint8)
    return np.asarray(cv2.imdecode(code, cv2.IMREAD_COLOR)[..., ::-1], np.uint8)


def _noise(rows: int, columns: int) -> NDArray[np.uint8]:
    return np.random.default_rng(1).integers(0, 256, (rows, columns, 3), dtype=np.uint8)


def _scan(pixels: NDArray[np.generic], mode: str = "grey", ppi: tuple[float, float] | None = None) -> Scan:
    return Scan(pixels=pixels, mode=mode, bit_depth=8 * pixels.itemsize, ppi=ppi)  # type: ignore[arg-type]


def _wave(fx: float, fy: float, *, side: int = 400, swing: float = 12.0) -> NDArray[np.uint8]:
    y, x = np.mgrid[:side, :side]
    return np.rint(128 + swing * np.cos(2 * np.pi * (fx * x + fy * y))).astype(np.uint8)


def _finding(kind: Kind, *vectors: tuple[float, float]) -> Finding:
    return Finding(
        kind=kind,
        confidence=1.0,
        visibility=2.0,
        coverage=1.0,
        regions=(),
        lines=tuple(Line(fx_cpp=x, fy_cpp=y, sigma_cpp=1e-6, amplitude=1.0, snr_db=20.0) for x, y in vectors),
        period_px=5.0,
    )


@pytest.mark.parametrize("centre", [(0, 0), (150, 250), (299, 499), (-5, 900)])
def test_a_crop_is_pixel_exact_and_inside_the_picture(centre: tuple[int, int]) -> None:
    rgb = _noise(500, 300)
    x, y, width, height = crop_box(300, 500, centre)
    assert (width, height) == (CROP_PX, CROP_PX)
    assert np.array_equal(_pixels(crop(rgb, (x, y, width, height))), rgb[y : y + height, x : x + width])


def test_a_crop_of_a_small_picture_is_the_picture() -> None:
    rgb = _noise(40, 60)
    assert np.array_equal(_pixels(crop(rgb, crop_box(60, 40, (10, 10)))), rgb)


def test_a_small_picture_is_not_reduced() -> None:
    picture = overview(_noise(30, 50))
    assert (picture.width, picture.height, picture.reduced) == (50, 30, False)


def test_an_overview_is_limited_and_says_that_it_was_reduced() -> None:
    picture = overview(_noise(2500, 1000), limit=500)
    assert (picture.width, picture.height, picture.reduced) == (200, 500, True)
    assert _pixels(picture).shape == (500, 200, 3)


def test_reduction_keeps_the_light() -> None:
    """Black and white lines reflect half the light: sRGB 188, not 128 (IEC 61966-2-1)."""
    lines = np.zeros((1200, 1200, 3), np.uint8)
    lines[:, ::2] = 255
    assert abs(float(_pixels(overview(lines, limit=300))[20:-20, 20:-20].mean()) - 188) <= 1.5


@pytest.mark.parametrize("frequency", [0.27, 0.31, 0.36, 0.41, 0.49])
def test_reduction_adds_no_moire(frequency: float) -> None:
    """A grating finer than the reduced picture can hold leaves under a tenth of its contrast."""
    x = np.arange(1500)
    light = 0.5 + 0.4 * np.cos(2 * np.pi * frequency * x)
    code = np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    rgb = np.repeat(np.tile(np.rint(255 * code).astype(np.uint8), (64, 1))[..., None], 3, axis=2)
    # Nyquist of the reduced grid lies at 0.2 cycles per pixel of the original.
    small = srgb_decode(_pixels(overview(rgb, limit=600))[..., 1] / 255)
    assert np.std(small[:, 20:-20]) * np.sqrt(2) < 0.1 * 0.4


def test_the_smaller_of_png_and_jpeg_is_taken() -> None:
    assert overview(np.full((200, 200, 3), 200, np.uint8)).uri.startswith("data:image/png")
    assert overview(_noise(200, 200)).uri.startswith("data:image/jpeg")


def test_every_kind_of_scan_is_shown_as_rgb() -> None:
    grey = np.full((4, 5), 0x8080, np.uint16)
    assert np.array_equal(shown_rgb(_scan(grey)), np.full((4, 5, 3), 128, np.uint8))
    deep = np.full((4, 5, 3), 0xFFFF, np.uint16)
    assert np.array_equal(shown_rgb(_scan(deep, "rgb")), np.full((4, 5, 3), 255, np.uint8))
    cyan = np.zeros((4, 5, 4), np.uint8)
    cyan[..., 0] = 255
    assert np.array_equal(shown_rgb(_scan(cyan, "cmyk"))[0, 0], [0, 255, 255])
    rgb = _noise(4, 5)
    assert np.array_equal(shown_rgb(_scan(rgb, "rgb")), rgb)


def test_labels_count_within_a_kind() -> None:
    found = [_finding(k) for k in ("halftone", "alias", "halftone", "rosette", "banding")]  # type: ignore[arg-type]
    assert labels(found) == ("S1", "A1", "S2", "R1", "B1")


def test_kinds_differ_by_shape_and_by_letter() -> None:
    found = [_finding(k, (0.1, -0.1)) for k in ("halftone", "alias", "rosette", "banding", "content")]  # type: ignore[arg-type]
    marks = spectrum_figures([_scan(_wave(0.1, -0.1))], found)[0].marks
    assert len({m.shape for m in marks}) == len({m.label for m in marks}) == 5


@pytest.mark.parametrize("side", [40, 400])
def test_a_mark_sits_on_its_line(side: int) -> None:
    """A sine on a bin of the transform: the centre of its bright spot is the centre of the mark."""
    fx, fy = 6 / 32, -4 / 32
    grain = np.random.default_rng(2).normal(0, 8, (side, side))
    wave = np.clip(_wave(fx, fy, side=side) + grain, 0, 255).astype(np.uint8)
    figure = spectrum_figures([_scan(wave)], [_finding("banding", (fx, fy))])[0]
    grey = _pixels(figure.picture)[..., 0]
    size = len(grey)
    rows, columns = np.nonzero(grey[: size // 2] == grey.max())
    assert figure.marks[0].x == pytest.approx(100 * (np.median(columns) + 0.5) / size)
    assert figure.marks[0].y == pytest.approx(100 * (np.median(rows) + 0.5) / size)


def test_after_a_reduction_marks_keep_to_their_lines_and_others_are_counted() -> None:
    """Half the pixels: a line at 0.1 cycles per pixel is at 0.2, one at 0.3 is beyond the axes."""
    master = _scan(_wave(0.1, 0, side=512), ppi=(600.0, 600.0))
    small = _scan(_wave(0.2, 0, side=256), ppi=(300.0, 300.0))
    before, after = spectrum_figures([master, small], [_finding("banding", (0.1, 0.0), (0.3, 0.0))])
    assert [round(m.x) for m in before.marks] == [60, 80]
    assert [round(m.x) for m in after.marks] == [70]
    assert (before.beyond, after.beyond) == (0, 1)
    assert (before.reach, after.reach) == ((300.0, 300.0), (150.0, 150.0))


def test_axes_are_per_inch_only_where_the_rate_is_known() -> None:
    plain, rated = (
        spectrum_figures([_scan(_wave(0.1, 0), ppi=ppi)], [])[0] for ppi in (None, (600.0, 300.0))
    )
    assert (plain.unit, plain.reach) == ("cycles/pixel", (0.5, 0.5))
    assert (rated.unit, rated.reach) == ("cycles/inch", (300.0, 150.0))


def test_crowded_labels_do_not_cover_each_other() -> None:
    crowd = [_finding("halftone", (0.02 * i, -0.015 * j)) for i in range(-2, 3) for j in range(1, 4)]
    marks = spectrum_figures([_scan(_wave(0.1, 0))], crowd)[0].marks
    assert len(marks) == 15

    def apart(a: Mark, b: Mark) -> bool:
        dx, dy = (abs(a.label_at[k] - b.label_at[k]) for k in (0, 1))
        return dx >= 7 or dy >= 4

    assert all(apart(a, b) for i, a in enumerate(marks) for b in marks[:i])
    assert all(0 < v < 100 for m in marks for v in m.label_at)


def test_spectra_are_of_moderate_contrast() -> None:
    """Photosensitive readers: never black against white, here within codes 45 to 210."""
    figure = spectrum_figures([_scan(_wave(0.125, 0, swing=120.0))], [])[0]
    grey = _pixels(figure.picture)
    assert grey.min() >= 45
    assert grey.max() <= 210


def test_a_blank_page_has_a_spectrum_without_marks() -> None:
    figure = spectrum_figures([_scan(np.full((300, 300), 200, np.uint8))], [])[0]
    assert figure.marks == ()
