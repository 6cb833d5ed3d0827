"""Descreening: the picture under a halftone, with its edges and tone.

The picture is encoded on the tangent of the sRGB curve at its own local tone, so that averages
are true averages of ink and evenly weighted to the eye. Several filters that are blind to the
screen to different degrees make feature pictures; at each pixel they are mixed by weights that a
small network reads off the local carrier, structure and edges. Where no screen is present, and
in solid ink, the scan is returned as it was.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from moire.carrier import presence
from moire.extend import extend
from moire.features import POWERS, Features, channel_features
from moire.mixing import shipped_mixer
from moire.nulls import ScreenLattice, null_transfer
from moire.scanner import srgb_decode, srgb_encode
from moire.spectrum import tile_phasors

_STRONG, _FAINT = (0.004, 0.12), (0.0012, 0.02)
_FINEST_PX = 1.75
_SLACK = 0.004
_TILE = 64
_STEADY = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Preparation:
    """What is measured once on the whole picture before its tiles are worked on.

    Attributes
    ----------
    lattices : tuple of ScreenLattice
        Screens coarse enough to be told from the picture.
    shares : ndarray, shape (channels, lattices)
        How much of each screen's null each channel needs.
    """

    lattices: tuple[ScreenLattice, ...]
    shares: NDArray[np.float64]

    @property
    def period_px(self) -> float:
        return float(np.mean([g.period_px for g in self.lattices]))

    @property
    def key(self) -> tuple[float, ...]:
        """The lattices as plain numbers, four for each."""
        return tuple(float(v) for g in self.lattices for k in (g.k1, g.k2) for v in k)


def descreen(
    image: NDArray[np.float32], lattices: Sequence[ScreenLattice], *, quick: bool = False
) -> NDArray[np.float32]:
    """Picture without the given screens.

    Parameters
    ----------
    image : ndarray, shape (rows, columns, 1 or 3)
        sRGB-encoded, 0..1.
    lattices : sequence of ScreenLattice
    quick : bool
        Lattice null only: faster and softer.

    Returns
    -------
    ndarray, same shape
    """
    ready = prepare(image, lattices)
    return apply(image, ready, quick=quick)


def prepare(image: NDArray[np.float32], lattices: Sequence[ScreenLattice]) -> Preparation:
    """Measure which screen matters in which channel."""
    kept = tuple(g for g in lattices if g.period_px >= _FINEST_PX)
    channels = image.shape[2]
    shares = np.zeros((channels, len(kept)))
    if kept and min(image.shape[:2]) >= 2 * _TILE:
        at = np.array([k for g in kept for k in (g.k1, g.k2)])
        planes = [np.ascontiguousarray(image[..., c]) for c in range(channels)]
        phasors = np.stack([tile_phasors(plane, at, size=_TILE)[0] for plane in planes])
        level = np.sqrt((np.abs(phasors) ** 2).mean(axis=(2, 3))).reshape(channels, len(kept), 2).max(axis=2)
        loudest = level.max(axis=1, keepdims=True)
        strong = level > np.maximum(_STRONG[0], _STRONG[1] * loudest)
        faint = level > np.maximum(_FAINT[0], _FAINT[1] * loudest)
        shares = np.where(strong, 1.0, np.where(faint, 0.5, 0.0))
    elif kept:
        shares[:] = 1.0
    return Preparation(lattices=kept, shares=shares)


def margin_px(lattices: Sequence[ScreenLattice]) -> int:
    """Pixels beyond a tile that its result depends on."""
    return int(np.ceil(12 * max((g.period_px for g in lattices), default=2.0))) + 8


def apply(tile: NDArray[np.float32], ready: Preparation, *, quick: bool = False) -> NDArray[np.float32]:
    """Descreen one tile of a picture; the margin around its part of interest is `margin_px`."""
    if not ready.lattices or not ready.shares.any():
        return tile
    margin = max(24, int(np.ceil(6 * ready.period_px)))
    linear = extend(srgb_decode(tile).astype(np.float32), ready.lattices, margin=margin)
    tangent = _Tangent.of(linear, ready.period_px)
    gate = _gate(tangent.residual(), ready)
    if not gate.any():
        return tile
    nulls = _nulls(tangent.encoded, ready, (1,) if quick else (1, *POWERS))
    inside = (slice(margin, -margin), slice(margin, -margin))
    gate = gate[inside]
    mixed = nulls[1][inside] if quick else _mixed(tangent.encoded, nulls, ready, inside, gate > 0)
    picture = tangent.decode(mixed, inside)
    gate = gate[..., None]
    return np.where(gate > 0, tile + gate * (picture - tile), tile).astype(np.float32)


def apply_features(
    image: NDArray[np.float32], truth: NDArray[np.float32], ready: Preparation
) -> list[tuple[Features, NDArray[np.float32]]]:
    """Features of each channel and the linear-light truth on the same tangent encoding, for training."""
    margin = max(24, int(np.ceil(6 * ready.period_px)))
    tangent = _Tangent.of(
        extend(srgb_decode(image).astype(np.float32), ready.lattices, margin=margin), ready.period_px
    )
    found = channel_features(tangent.encoded, _nulls(tangent.encoded, ready), ready.lattices, ready.shares)
    inside = (slice(margin, -margin), slice(margin, -margin))
    base = tangent.base[inside]
    target = srgb_encode(base) + _slope(base) * (truth - base)
    return [
        (
            Features(pictures=[p[inside] for p in f.pictures], inputs=[i[inside] for i in f.inputs]),
            np.asarray(target[..., c], np.float32),
        )
        for c, f in enumerate(found)
    ]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Tangent:
    """A linear picture on the tangent of the sRGB curve at its local mean."""

    base: NDArray[np.float32]
    tone: NDArray[np.float32]
    slope: NDArray[np.float32]
    encoded: NDArray[np.float32]

    @staticmethod
    def of(linear: NDArray[np.float32], period: float) -> _Tangent:
        import cv2

        low = cv2.GaussianBlur(linear, (0, 0), period / 2, borderType=cv2.BORDER_REFLECT)
        base = np.asarray(np.maximum(low.reshape(linear.shape), 0.003), np.float32)
        tone, slope = srgb_encode(base).astype(np.float32), _slope(base)
        return _Tangent(base=base, tone=tone, slope=slope, encoded=tone + slope * (linear - base))

    def residual(self) -> NDArray[np.float32]:
        return np.asarray(self.encoded - self.tone, np.float32)

    def decode(self, encoded: NDArray[np.float32], inside: tuple[slice, slice]) -> NDArray[np.float32]:
        """sRGB picture of the part `inside` from its encoding."""
        linear = self.base[inside] + (encoded - self.tone[inside]) / self.slope[inside]
        return np.asarray(srgb_encode(linear), np.float32)


def _slope(linear: NDArray[np.float32]) -> NDArray[np.float32]:
    """Slope of the sRGB curve, held at that of 0.012 in the deepest shadows."""
    return np.asarray(1.055 / 2.4 * np.maximum(linear, 0.012) ** (1 / 2.4 - 1), np.float32)


def _nulls(
    encoded: NDArray[np.float32], ready: Preparation, powers: Sequence[int] = (1, *POWERS)
) -> dict[int, NDArray[np.float32]]:
    """The picture through the null and its powers, one for each of `powers`."""
    from scipy import fft

    rows, columns, channels = encoded.shape
    shape = (fft.next_fast_len(rows, real=True), fft.next_fast_len(columns, real=True))
    out = {k: np.empty_like(encoded) for k in powers}
    for c in range(channels):
        padded = np.pad(encoded[..., c], ((0, shape[0] - rows), (0, shape[1] - columns)), mode="symmetric")
        spectrum = fft.rfft2(padded)
        for k in powers:
            passed = spectrum * _transfer(shape, ready.key, tuple(ready.shares[c]), k)
            out[k][..., c] = fft.irfft2(passed, s=shape)[:rows, :columns]
    return out


@lru_cache(maxsize=24)
def _transfer(
    shape: tuple[int, int], key: tuple[float, ...], shares: tuple[float, ...], power: int
) -> NDArray[np.float32]:
    """One power of the null; neighbouring tiles and channels ask for the same one again."""
    if power == 1:
        vectors = np.reshape(key, (-1, 2, 2))
        return null_transfer(shape, [ScreenLattice(k1=a, k2=b) for a, b in vectors], shares)
    return 1 - (1 - _transfer(shape, key, shares, 1)) ** power


def _mixed(
    encoded: NDArray[np.float32],
    nulls: dict[int, NDArray[np.float32]],
    ready: Preparation,
    inside: tuple[slice, slice],
    wanted: NDArray[np.bool_],
) -> NDArray[np.float32]:
    mixer = shipped_mixer()
    out = np.empty((*wanted.shape, encoded.shape[2]), np.float32)
    for c, features in enumerate(channel_features(encoded, nulls, ready.lattices, ready.shares)):
        pictures = [p[inside] for p in features.pictures]
        picture = mixer.mix(pictures, [i[inside] for i in features.inputs], wanted)
        # The picture's own nulls and the scan come first among the features.
        low, high = np.minimum.reduce(pictures[:_STEADY]), np.maximum.reduce(pictures[:_STEADY])
        out[..., c] = np.clip(picture, low - _SLACK, high + _SLACK)
    return out


def _gate(residual: NDArray[np.float32], ready: Preparation) -> NDArray[np.float32]:
    """Union over the screens of where each is present, in the channel that shows it best."""
    total = np.zeros(residual.shape[:2], np.float32)
    for i, lattice in enumerate(ready.lattices):
        share = ready.shares[:, i]
        if not share.any():
            continue
        others = [g for g in ready.lattices if g is not lattice]
        plane = np.ascontiguousarray(residual @ (share / share.sum()).astype(np.float32))
        np.maximum(total, presence(plane, lattice, others), out=total)
    return total
