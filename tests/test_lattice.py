"""Lattices: which pairs are screens, and which are combinations of others."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from moire.beats import rosette_parents
from moire.lattice import Lattice, grid_distance, quarter_turn, wrap
from moire.pairing import find_lattices, missing_partners
from moire.peaks import Peak
from moire.screens import is_halftone, measure_screen, name_inks, order_of
from moire.units import page_vector

SIZE = 128
frequencies = st.tuples(st.floats(-0.5, 0.499), st.floats(-0.5, 0.499)).map(np.array)


def peak(
    f: tuple[float, float], amplitude: float = 10, colour: tuple[float, ...] = (1, 1, 1), coherence: float = 1
) -> Peak:
    return Peak(
        f=wrap(np.array(f, float)), sigma=np.full(2, 1e-6), z=15, excess_nat=3, amplitude=amplitude,
        coherence=coherence,
        local_coherence=coherence, doubled=False, tiles=40, bin_cpp=1 / SIZE, off_bin=0.1,
        colour=np.array(colour, float), weight=np.ones((6, 6), np.float32),
    )  # fmt: skip


def screen(
    f: float, angle: float, amplitude: float = 10, colour: tuple[float, ...] = (1, 1, 1)
) -> tuple[Peak, Peak]:
    return peak(page_vector(f, angle), amplitude, colour), peak(page_vector(f, angle + 90), amplitude, colour)


def combination(a: tuple[Peak, Peak], m: float, n: float, amplitude: float) -> tuple[Peak, Peak]:
    k1, k2 = a[0].f, a[1].f
    return peak(tuple(m * k1 + n * k2), amplitude), peak(tuple(m * k2 - n * k1), amplitude)


def test_a_pair_at_right_angles_is_a_lattice() -> None:
    (found,) = find_lattices(screen(0.2, 33), size=SIZE)
    assert np.hypot(*found.k1) == pytest.approx(0.2)
    assert found.squareness_bins < 1e-6


def test_screens_of_several_inks_are_all_kept() -> None:
    peaks = (
        screen(0.2, 15, 9, (1, 0.3, 0.1))
        + screen(0.2, 75, 7, (0.2, 1, 0.7))
        + screen(0.21, 2, 4, (0, 0.1, 1))
    )
    assert len(find_lattices(peaks, size=SIZE)) == 3


def test_a_print_may_show_its_rosette_more_than_its_screens() -> None:
    """Near half the rate the lens takes most of the screens and little of their coarse sums."""
    first, second = screen(0.44, 15, 2), screen(0.45, 45, 2.5)
    sums = tuple(peak(tuple(wrap(a.f - b.f)), 6) for a, b in zip(first, second, strict=True))
    peaks = (*first, *second, *sums)
    lattices = find_lattices((*first, *second), size=SIZE)
    assert is_halftone(lattices[0], lattices, peaks, SIZE)
    elsewhere = (*first, *second, peak((0.1, 0.23), 6), peak((0.23, 0.12), 6))
    assert not is_halftone(lattices[0], lattices, elsewhere, SIZE)


@pytest.mark.parametrize(
    ("m", "n", "amplitude"),
    [
        (1, 1, 5),
        (2, 0, 3),
        (2, 1, 1.5),
        (0.5, 0.5, 2),
        (0.5, 0, 2),
        (1 / 3, 0, 1.5),
        (0.4, 0.2, 2),
        (0.6, -0.2, 2),
    ],
)
def test_orders_and_rational_cells_are_not_screens(m: float, n: float, amplitude: float) -> None:
    """A rational cell really prints its fractions; they must not halve the ruling."""
    base = screen(0.17, 20)
    (found,) = find_lattices(base + combination(base, m, n, amplitude), size=SIZE)
    assert np.hypot(*found.k1) == pytest.approx(0.17)


def test_a_strong_half_order_is_another_screen() -> None:
    base = screen(0.17, 20)
    assert len(find_lattices(base + combination(base, 0.5, 0.5, 9), size=SIZE)) == 2


def test_the_sum_of_two_screens_is_a_rosette_not_a_screen() -> None:
    a, b = screen(0.2, 15), screen(0.2, 45)
    beat = peak(tuple(a[0].f - b[0].f), 4), peak(tuple(a[1].f - b[1].f), 4)
    found = find_lattices(a + b + beat, size=SIZE)
    assert len(found) == 2
    parents = rosette_parents(beat[0].f, found, 0.2 / SIZE)
    assert parents is not None
    assert parents[:2] == (0, 1)
    # Source: T = p / (2 sin(a / 2)); two equal square screens 30 degrees apart beat at 0.517638 f.
    assert np.hypot(*beat[0].f) / 0.2 == pytest.approx(0.517638, abs=1e-6)


def test_images_of_the_block_grid_are_not_screens_in_jpeg() -> None:
    base = screen(0.3, 20)
    image = peak(tuple(base[0].f + np.array([0.125, 0])), 3), peak(tuple(base[1].f - np.array([0, 0.125])), 3)
    assert len(find_lattices(base + image, size=SIZE, jpeg=True)) == 1
    assert len(find_lattices(base + image, size=SIZE, jpeg=False)) == 2


def test_unlike_colours_are_not_one_screen() -> None:
    a, b = peak(page_vector(0.2, 33), colour=(1, 0.3, 0.1)), peak(page_vector(0.2, 123), colour=(0.1, 0.1, 1))
    assert find_lattices((a, b), size=SIZE) == ()


def test_an_uneven_grid_turns_on_the_page() -> None:
    aspect = (0.8, 1.25)
    k1 = np.array(page_vector(0.2, 20))
    k2 = quarter_turn(k1, aspect)
    (found,) = find_lattices((peak(tuple(k1)), peak(tuple(k2))), size=SIZE, aspect=aspect)
    assert found.squareness_bins < 1e-6
    assert k1 * aspect @ (k2 * aspect) == pytest.approx(0, abs=1e-12)


def test_a_lone_line_calls_for_its_partner() -> None:
    one, two = screen(0.25, 30)
    ((kx, ky),) = missing_partners((one,), size=SIZE)
    assert grid_distance(np.array([kx, ky]) / SIZE, two.f) < 1 / SIZE
    assert missing_partners((one, two), size=SIZE) == ()


@given(frequencies, st.integers(-3, 3), st.integers(-3, 3))
def test_grid_distance_knows_no_alias_and_no_sign(f: np.ndarray, n: int, m: int) -> None:
    assert grid_distance(f, -f + np.array([n, m])) == pytest.approx(0, abs=1e-9)


def test_orders_fold_on_the_grid() -> None:
    (lattice,) = find_lattices(screen(0.35, 10), size=SIZE)
    folded = wrap(3 * lattice.k1 - lattice.k2)
    assert order_of(folded, lattice, 0.1 / SIZE, limit=5) in ((3, -1), (-3, 1))
    assert order_of(np.array([0.11, 0.07]), lattice, 0.01 / SIZE, limit=5) is None


@pytest.mark.parametrize(
    ("colour", "ink"),
    [
        ((1, 0.33, 0.12), "cyan"),
        ((0.2, 1, 0.65), "magenta"),
        ((0.05, 0.15, 1), "yellow"),
        ((1, 0.9, 1.1), "black"),
    ],
)
def test_ink_by_colour(colour: tuple[float, float, float], ink: str) -> None:
    assert name_inks(find_lattices(screen(0.2, 33, colour=colour), size=SIZE)) == (ink,)


def test_a_grey_scan_cannot_name_several_inks() -> None:
    lattices = find_lattices(screen(0.2, 15, colour=(1,)) + screen(0.2, 40, colour=(1,)), size=SIZE)
    assert name_inks(lattices) == ("unknown", "unknown")


def test_screen_weighs_its_vectors_by_their_sigmas() -> None:
    k1, k2 = np.array(page_vector(100, 30)), np.array(page_vector(101, 120))
    first = measure_screen(k1, k2, (0.001, 1.0), ink="black")
    even = measure_screen(k1, k2, (0.01, 0.01), ink="black")
    assert first.ruling_lpi == pytest.approx(100, abs=1e-4)
    assert even.ruling_lpi == pytest.approx(100.5)
    assert even.ruling_lpi_sigma == pytest.approx(1.25 * 0.35, abs=0.01)
    assert isinstance(find_lattices(screen(0.2, 1), size=SIZE)[0], Lattice)
