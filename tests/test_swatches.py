"""A large cloth counted swatch by swatch has the count that it has as a whole."""

import numpy as np
import pytest
from numpy.typing import NDArray

from moire import swatches
from moire.threads import count_threads

SIDE = 1400
FRAME = np.array([[0.141, 0.002], [-0.001, 0.117]])
ORDERS = np.array([(1.0, 0.0), (0.0, 1.0), (0.5, 0.5), (-0.5, 0.5)])


def cloth(bow: float = 0.0) -> NDArray[np.float32]:
    rng = np.random.default_rng(3)
    y, x = np.mgrid[:SIDE, :SIDE].astype(float)
    down = y - bow * SIDE * (1 - (2 * x / SIDE - 1) ** 2)
    ends, picks = FRAME.T @ np.stack([x.ravel(), down.ravel()])
    image = sum(np.cos(2 * np.pi * (a * ends + b * picks)) for a, b in ORDERS).reshape(SIDE, SIDE)
    return (128 + 20 * image + rng.normal(0, 5, image.shape)).astype(np.float32)


@pytest.fixture
def by_swatches(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(swatches, "_WHOLE_PX", 1000)
    monkeypatch.setattr(swatches, "_SWATCH_PX", 500)


@pytest.mark.usefixtures("by_swatches")
def test_swatches_agree_with_the_whole() -> None:
    image = cloth()
    whole, parts = count_threads(image, FRAME, ORDERS), swatches.count_cloth(image, FRAME, ORDERS)
    assert whole is not None
    assert parts is not None
    for one, other in ((whole.warp, parts.warp), (whole.weft, parts.weft)):
        assert np.abs(one - other).max() < 2e-5
    assert parts.warp_map.shape == (len(parts.y), len(parts.x), 2)
    assert parts.present.shape == parts.strength.shape == (len(parts.y), len(parts.x))
    assert parts.present.mean() > 0.95
    assert (np.diff(parts.x) > 0).all()
    assert np.ptp(parts.x) > 0.9 * SIDE


@pytest.mark.usefixtures("by_swatches")
def test_a_bow_is_seen_across_swatches() -> None:
    parts = swatches.count_cloth(cloth(bow=0.01), FRAME, ORDERS)
    assert parts is not None
    assert parts.bow == pytest.approx(0.01, abs=0.002)


@pytest.mark.usefixtures("by_swatches")
def test_bare_platen_beside_the_cloth_does_not_count() -> None:
    image = cloth()
    image[:, 900:] = 240 + np.random.default_rng(0).normal(0, 2, (SIDE, 500))
    parts = swatches.count_cloth(image, FRAME, ORDERS)
    assert parts is not None
    assert np.abs(parts.warp - FRAME[:, 0]).max() < 1e-4
    assert not parts.present[:, parts.x > 1000].any()
