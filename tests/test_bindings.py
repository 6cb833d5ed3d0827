"""Bindings have the repeat lattices that textbooks give them."""

import math

import numpy as np
import pytest

from moire.bindings import binding_levels, parse_binding, repeat_lattice, swapped, wale_angle


@pytest.mark.parametrize(
    ("name", "order", "n", "level"),
    # Source: transform of the binding matrix. Points (i, s i mod n) have lines only where h + s k = 0 mod n
    # with k up the page (reciprocal of a step lattice); here k counts down, so its sign is turned.
    [
        ("plain", (1, 1), 2, 0.5),
        ("plain", (1, -1), 2, 0.5),
        ("basket2/2", (1, 1), 4, 0.25),
        ("basket2/2", (1, -1), 4, 0.25),
        ("twill3/1Z", (1, 1), 4, 0.25),
        ("twill3/1Z", (2, 2), 4, 0.25),
        ("twill1/3S", (1, -1), 4, 0.25),
        ("twill2/2Z", (1, 1), 4, 0.353553),
        ("twill2/2S", (1, -1), 4, 0.353553),
        ("twill2/2Z", (2, 2), 4, 0.0),
        ("twill2/2Z", (1, -1), 4, 0.0),
        ("twill2/1S", (1, -1), 3, 0.333333),
        ("satin5/2", (1, -2), 5, 0.2),
        ("satin5/2", (2, 1), 5, 0.2),
        ("satin5/3", (1, 2), 5, 0.2),
        ("satin8/3", (2, -2), 8, 0.125),
        ("satin8/3", (1, 3), 8, 0.125),
        ("satin8/3", (3, 1), 8, 0.125),
    ],
)
def test_a_binding_has_its_published_lines(name: str, order: tuple[int, int], n: int, level: float) -> None:
    matrix = parse_binding(name).matrix
    assert matrix.shape == (n, n)
    h, k = order
    assert binding_levels(matrix)[k % n, h % n] == pytest.approx(level, abs=1e-6)


@pytest.mark.parametrize(
    ("name", "generators", "shortest"),
    # Lengths in cycles per thread: plain 1/2 of the diagonal, satin of 5 0.447214, satin of 8 0.353553.
    [
        ("plain", {(0.5, 0.5), (-0.5, 0.5)}, 0.707107),
        ("basket2/2", {(0.25, 0.25), (-0.25, 0.25)}, 0.353553),
        ("twill3/1Z", {(0.25, 0.25), (-0.5, 0.5)}, 0.353553),
        ("twill2/2S", {(-0.25, 0.25), (0.75, 0.25)}, 0.353553),
        ("satin5/2", {(0.4, 0.2), (-0.2, 0.4)}, 0.447214),
        ("satin8/3", {(-0.25, 0.25), (0.375, 0.125)}, 0.353553),
    ],
)
def test_repeat_lattice(name: str, generators: set[tuple[float, float]], shortest: float) -> None:
    found = repeat_lattice(parse_binding(name).matrix)
    assert set(found) == generators
    assert math.hypot(*found[0]) == pytest.approx(shortest, abs=1e-6)


def test_z_rises_to_the_right() -> None:
    matrix = parse_binding("twill2/2Z").matrix
    up = matrix[::-1]
    assert (up[1] == np.roll(up[0], 1)).all()


def test_every_end_of_a_twill_goes_over_as_many_as_it_says() -> None:
    assert (parse_binding("twill3/1Z").matrix.sum(axis=0) == 3).all()
    assert (parse_binding("satin8/3").matrix.sum(axis=0) == 1).all()


def test_twill_angle_is_that_of_its_setts() -> None:
    """Denim of 26.8 x 17.3 threads/cm: atan(26.8 / 17.3) = 57.156852 degrees (computed)."""
    assert wale_angle(26.8, 17.3) == pytest.approx(57.156852, abs=1e-6)
    assert wale_angle(20, 20) == pytest.approx(45)


@pytest.mark.parametrize(
    "name", ["", "herringbone", "twill2/2", "satin6/2", "satin5/4", "basket1/1", "twill0/3Z"]
)
def test_what_is_no_weave_is_refused(name: str) -> None:
    with pytest.raises(ValueError, match=r"write|give"):
        parse_binding(name)


def test_orders_of_a_plain_weave_are_halves_together_and_whole() -> None:
    assert parse_binding("plain").orders(1) == ((1, 0), (0.5, 0.5), (0, 1), (-0.5, 0.5))
    assert (0.5, 0) not in parse_binding("plain").orders(3)
    assert (0.25, 0.25) in parse_binding("twill2/2Z").orders(1)
    assert (-0.25, 0.25) not in parse_binding("twill2/2Z").orders(1)


@pytest.mark.parametrize("name", ["plain", "basket2/1", "twill3/1S", "twill2/2Z", "satin5/2", "satin8/3"])
def test_a_cloth_turned_over_in_mind_has_the_transposed_lines(name: str) -> None:
    binding = parse_binding(name)
    # Warp on top becomes weft on top; which of them shows more changes the mean alone.
    levels, other = binding_levels(~binding.matrix.T), binding_levels(swapped(binding).matrix)
    levels[0, 0] = other[0, 0] = 0
    assert np.allclose(levels, other)


@pytest.mark.parametrize("name", ["plain", "basket2/1", "twill3/1S", "twill2/2Z", "satin5/2", "satin8/3"])
def test_a_structure_in_words_is_read_back(name: str) -> None:
    binding = parse_binding(name)
    assert parse_binding(binding.structure).structure == binding.structure
