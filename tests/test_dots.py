"""Dot coefficients, against their closed forms worked out elsewhere."""

import numpy as np
import pytest

from moire.dots import SHAPES, dot_coefficients, round_coefficient

ORDERS = ((1, 0), (1, 1), (2, 0), (2, 1), (2, 2), (3, 0))


@pytest.mark.parametrize(
    ("shape", "tone", "values"),
    # Source: Fourier transforms of the disc (jinc), the square and the line (textbook: R. N. Bracewell,
    # The Fourier Transform and Its Applications), worked for a cell of side 1 and rounded to 6 digits.
    [
        ("disc", 0.10, (0.085093, 0.071707, 0.049033, 0.039531, 0.017226, 0.011575)),
        ("disc", 0.25, (0.163867, 0.098828, 0.016720, -0.006558, -0.032817, -0.032544)),
        ("disc", 0.50, (0.197655, 0.033440, -0.065633, -0.059571, 0.003123, 0.018638)),
        # Above half tone a Euclidean dot is paper: c = -(-1)^(m+n) c(1 - a).
        ("disc", 0.75, (0.163867, -0.098828, -0.016720, -0.006558, 0.032817, -0.032544)),
        ("disc", 0.90, (0.085093, -0.071707, -0.049033, 0.039531, -0.017226, 0.011575)),
        ("square", 0.10, (0.084344, 0.071138, 0.046034, 0.038827, 0.021192, 0.005386)),
        ("square", 0.25, (0.159155, 0.101321, 0.0, 0.0, 0.0, -0.053052)),
        ("square", 0.50, (0.179094, 0.064149, -0.108477, -0.038855, 0.023535, 0.027908)),
        ("square", 0.75, (0.112630, 0.016914, -0.102800, -0.015438, 0.014090, 0.087561)),
        ("diamond", 0.10, (0.084596, 0.070200, 0.049280, 0.037508, 0.011588, 0.016631)),
        ("diamond", 0.25, (0.162691, 0.089547, 0.032075, -0.011464, -0.054239, 0.000808)),
        ("diamond", 0.50, (0.202642, 0.0, 0.0, -0.067547, 0.0, 0.022516)),
        ("line", 0.10, (0.098363, 0.0, 0.093549, 0.0, 0.0, 0.085839)),
        ("line", 0.25, (0.225079, 0.0, 0.159155, 0.0, 0.0, 0.075026)),
        ("line", 0.50, (0.318310, 0.0, 0.0, 0.0, 0.0, -0.106103)),
        ("line", 0.75, (0.225079, 0.0, -0.159155, 0.0, 0.0, 0.075026)),
    ],
)  # fmt: skip
def test_coefficients(shape: str, tone: float, values: tuple[float, ...]) -> None:
    found = dot_coefficients(shape, (tone,), 16)[0]  # type: ignore[arg-type]
    # A closed form is exact; a thresholded cell of 256 x 256 is good to its own pixels.
    within = 1e-6 if shape == "disc" else 2e-3
    assert [abs(found[n, m]) for m, n in ORDERS] == pytest.approx(np.abs(values), abs=within)
    assert found[0, 0].real == pytest.approx(tone, abs=within)


@pytest.mark.parametrize(
    ("tone", "first", "second", "diagonal"),
    # Source: transform of an ellipse of axes 1.4 to 1, a 2 J1(2 pi rho) / (2 pi rho).
    [
        (0.10, 0.079563, 0.089192, 0.070269),
        (0.25, 0.135558, 0.186134, 0.092553),
        (0.50, 0.118576, 0.267315, 0.021062),
    ],
)
def test_oval_dots(tone: float, first: float, second: float, diagonal: float) -> None:
    c = dot_coefficients("oval", (tone,), 8)[0]
    assert [c[0, 1].real, c[1, 0].real, c[1, 1].real] == pytest.approx([first, second, diagonal], abs=1e-6)


@pytest.mark.parametrize(
    ("tone", "order", "value"),
    # Source: zeros and the maximum of J1 and J0 (first zero of J0 2.404826), worked for a cell of side 1.
    [
        (0.460211, (1, 0), 0.198698),
        (0.292089, (2, 0), 0.0),
        (0.233671, (2, 1), 0.0),
        (0.146044, (2, 2), 0.0),
        (0.489585, (2, 2), 0.0),
        (0.129817, (3, 0), 0.0),
        (0.435187, (3, 0), 0.0),
    ],
)
def test_landmarks_of_a_disc(tone: float, order: tuple[int, int], value: float) -> None:
    m, n = np.array(order)
    assert float(round_coefficient(tone, m, n)) == pytest.approx(value, abs=1e-6)


@pytest.mark.parametrize("shape", SHAPES)
def test_ink_is_conserved(shape: str) -> None:
    """Parseval: an ink amount of 0 or 1 has as much energy as its mean."""
    tone = 0.37
    c = dot_coefficients(shape, (tone,), 200)[0]
    assert float((np.abs(c) ** 2).sum()) == pytest.approx(tone, rel=0.01)
