"""Tiles that carry a line well, one by one."""

import numpy as np
import pytest

from moire.patches import cut_patches, patch_phasors, strong_tiles
from moire.spectrum import tile_phasors


def test_patches_agree_with_the_phasors_of_the_whole_page() -> None:
    rng = np.random.default_rng(4)
    page = rng.normal(100, 5, (320, 384, 1)).astype(np.float32)
    f = np.array([[0.21, -0.13], [0.4, 0.05]])
    whole, _, _ = tile_phasors(page[..., 0], f, size=64)
    tiles = np.array([[2, 3], [5, 9]])
    v, means = patch_phasors(cut_patches(page, tiles, size=64), f)
    # A patch counts phase from its own corner, the page from pixel (0, 0).
    turned = v[..., 0] * np.exp(-2j * np.pi * (f[:, :1] * 32 * tiles[:, 1] + f[:, 1:] * 32 * tiles[:, 0]))
    # The page's mean is taken off once, the patch's own mean here: they leak differently, a little.
    assert turned == pytest.approx(whole[:, tiles[:, 0], tiles[:, 1]], abs=0.01)
    assert means[0, 0] == pytest.approx(page[64:128, 96:160].mean(), rel=1e-5)


def test_strong_tiles_are_spread_over_all_that_carry_the_line() -> None:
    weight = np.zeros((20, 30))
    weight[5:15, 10:20] = 0.8
    weight[0, 0] = 0.2
    tiles = strong_tiles(weight, limit=25)
    assert len(tiles) == 25
    assert weight[tuple(tiles.T)].min() == 0.8
    assert (tiles.min(axis=0) == (5, 10)).all()
    assert (tiles.max(axis=0) == (14, 19)).all()
    assert len(strong_tiles(np.zeros((3, 3)))) > 0
