"""Descreening's rooms: nulls, continuation, presence, mixing, and the whole of them in tiles."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from prints import card_print, scanned

from moire.carrier import local_amplitudes, presence
from moire.descreen import apply, descreen, margin_px, prepare
from moire.extend import extend
from moire.mixing import shipped_mixer
from moire.nulls import ScreenLattice, null_transfer
from moire.proof import ScreenOrder
from moire.tiles import map_tiles
from moire.units import page_vector


def lattice(f: float, angle: float) -> ScreenLattice:
    k1 = np.array(page_vector(f, angle))
    return ScreenLattice(k1=k1, k2=np.array([k1[1], -k1[0]]))


def dots(shape: tuple[int, int], screen: ScreenLattice, amplitude: float = 0.2) -> NDArray[np.float32]:
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]]
    waves = [np.cos(2 * np.pi * (k[0] * x + k[1] * y)) for k in (screen.k1, screen.k2)]
    return (0.5 + amplitude / 2 * (waves[0] + waves[1])).astype(np.float32)


def test_a_null_is_zero_at_every_order_and_one_at_flat_tone() -> None:
    """The mean over a cell's parallelogram has the transfer sinc(f.a1) sinc(f.a2) (textbook)."""
    k1 = np.array([8, 6]) / 64
    screen = ScreenLattice(k1=k1, k2=np.array([6, -8]) / 64)
    null = null_transfer((64, 64), [screen], [1.0])
    assert null[0, 0] == pytest.approx(1)
    for m, n in ((1, 0), (0, 1), (1, 1), (2, 0), (1, -1), (2, 1)):
        fx, fy = np.rint(64 * (m * screen.k1 + n * screen.k2)).astype(int)
        if fx < 0:
            fx, fy = -fx, -fy
        assert null[fy % 64, fx] == pytest.approx(0, abs=1e-5)
    assert 0 <= null.min() <= null.max() <= 1


def test_a_screen_that_does_not_matter_is_left() -> None:
    assert (null_transfer((32, 32), [lattice(0.2, 20)], [0.0]) == 1).all()


@given(st.floats(0.12, 0.4), st.floats(0, 90))
def test_dots_go_on_beyond_the_border(f: float, angle: float) -> None:
    screen = lattice(f, angle)
    whole = dots((200, 220), screen)
    grown = extend(whole[40:160, 40:180, None], [screen], margin=30)[..., 0]
    error = grown - whole[10:190, 10:210]
    assert grown.shape == (180, 200)
    assert np.abs(error[30:-30, 30:-30]).max() < 1e-5
    mirrored = np.pad(whole[40:160, 40:180], 30, mode="reflect") - whole[10:190, 10:210]
    # Mirrored dots are wrong by their whole swing; a near-common shift is wrong by less.
    assert np.sqrt((error**2).mean()) < 0.75 * np.sqrt((mirrored**2).mean())


def test_local_amplitude_is_the_lines_own() -> None:
    screen = lattice(0.23, 31)
    wave = dots((240, 240), screen) - 0.5
    assert np.median(local_amplitudes(wave, [screen.k1], sigma_px=10)) == pytest.approx(0.1, rel=0.03)


def test_presence_is_shut_where_no_screen_is() -> None:
    screen = lattice(0.21, 40)
    page = np.random.default_rng(0).normal(0.5, 0.01, (300, 600)).astype(np.float32)
    page[:, :250] += dots((300, 250), screen) - 0.5
    gate = presence(page - 0.5, screen, [])
    assert gate[60:240, 40:210].min() == 1
    assert gate[60:240, 330:].max() == 0


def test_mixing_stays_between_its_features() -> None:
    mixer = shipped_mixer()
    rng = np.random.default_rng(0)
    inputs = rng.normal(mixer.centre, mixer.scale, (500, len(mixer.centre))).T.astype(np.float32)
    weights = mixer.weights(inputs)
    assert weights.min() >= 0
    assert weights.sum(axis=0) == pytest.approx(np.ones(500), abs=1e-5)
    count = weights.shape[0]
    features = [rng.random((20, 25)).astype(np.float32) for _ in range(count)]
    planes = [row.reshape(20, 25) for row in inputs]
    mixed = mixer.mix(features, planes)
    assert (mixed >= np.min(features, axis=0) - 1e-5).all()
    assert (mixed <= np.max(features, axis=0) + 1e-5).all()


def test_a_flat_tint_comes_out_flat() -> None:
    order = ScreenOrder(ruling_lpi=85, angle_deg=37, ink="black")
    sheet = card_print(order, width_in=0.9)
    tint = sheet.layers[0].coverage * 0 + np.float32(0.4)
    sheet = replace(sheet, layers=(replace(sheet.layers[0], coverage=tint),))
    scan, truth = scanned(sheet, 300, noise=0.002)
    clear = descreen((scan.pixels / 255).astype(np.float32), [lattice(85 / 300, 37)])
    inner = clear[20:-20, 20:-20]
    assert inner.std(axis=(0, 1)).max() * 255 < 1.5
    assert inner.mean() == pytest.approx(float(truth.mean()), abs=2 / 255)


def test_tiles_agree_with_the_whole() -> None:
    scan, _ = scanned(card_print(ScreenOrder(ruling_lpi=100, angle_deg=25, ink="black"), width_in=1.6), 300)
    image = (scan.pixels / 255).astype(np.float32)
    screens = [lattice(100 / 300, 25)]
    ready = prepare(image, screens)
    whole = apply(image, ready)
    tiled = map_tiles(image, lambda t: apply(t, ready), size=200, margin=margin_px(screens))
    difference = np.abs(tiled - whole)
    assert np.quantile(difference, 0.99) < 1 / 255
    assert difference.mean() < 0.1 / 255


def test_a_screen_too_fine_to_part_from_the_picture_is_left_alone() -> None:
    image = np.random.default_rng(0).random((200, 200, 3)).astype(np.float32)
    assert descreen(image, [lattice(0.65, 45)]) is image


def test_a_lattice_a_little_wrong_costs_little() -> None:
    """An error of 0.0001 cycles per pixel is many times what an examination leaves."""
    scan, truth = scanned(
        card_print(ScreenOrder(ruling_lpi=100, angle_deg=25, ink="black"), width_in=1.2), 300
    )
    image = (scan.pixels / 255).astype(np.float32)
    right, wrong = (descreen(image, [lattice(100 / 300 + error, 25)]) for error in (0, 1e-4))
    loss = np.log10(np.mean((wrong - truth) ** 2) / np.mean((right - truth) ** 2))
    assert 10 * loss < 0.3
