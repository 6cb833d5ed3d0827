"""Tiles cover the picture once, and agree with the whole."""

import cv2
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from moire.tiles import map_tiles, split


@given(st.integers(1, 300), st.integers(1, 300), st.integers(1, 120), st.integers(0, 40))
@settings(max_examples=60)
def test_inner_parts_cover_every_pixel_once(width: int, height: int, size: int, margin: int) -> None:
    count = np.zeros((height, width), int)
    for tile in split(width, height, size=size, margin=margin):
        x, y, w, h = tile.inner
        count[y : y + h, x : x + w] += 1
        ox, oy, ow, oh = tile.outer
        assert 0 <= ox <= x
        assert 0 <= oy <= y
        assert x + w <= ox + ow <= width
        assert y + h <= oy + oh <= height
    assert (count == 1).all()


def test_a_filter_in_tiles_is_the_filter_of_the_whole() -> None:
    picture = np.random.default_rng(0).random((150, 210, 2)).astype(np.float32)
    told: list[float] = []
    blurred = map_tiles(
        picture, lambda t: cv2.GaussianBlur(t, (0, 0), 2), size=64, margin=12, progress=told.append
    )
    assert np.allclose(blurred, cv2.GaussianBlur(picture, (0, 0), 2), atol=1e-5)
    assert told[-1] == 1
    assert told == sorted(told)
