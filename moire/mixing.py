"""Per-pixel mixing of feature pictures by a small network trained on simulated prints."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

_BLOCK = 1 << 12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mixer:
    """Two hidden layers of rectified units, then weights that sum to one.

    Attributes
    ----------
    centre, scale : ndarray, shape (inputs,)
        Inputs are ``(x - centre) / scale`` before the first layer.
    layers : tuple of (matrix, bias)
        Shapes (in, out) and (out,).
    """

    centre: NDArray[np.float32]
    scale: NDArray[np.float32]
    layers: tuple[tuple[NDArray[np.float32], NDArray[np.float32]], ...]

    def weights(self, inputs: NDArray[np.float32]) -> NDArray[np.float32]:
        """Mixing weights, shape (features, pixels), of inputs of shape (inputs, pixels)."""
        x = (inputs - self.centre[:, None]) / self.scale[:, None]
        for matrix, bias in self.layers[:-1]:
            x = matrix.T @ x
            x += bias[:, None]
            np.maximum(x, 0, out=x)
        x = self.layers[-1][0].T @ x
        x += self.layers[-1][1][:, None]
        x -= x.max(axis=0)
        np.exp(x, out=x)
        x /= x.sum(axis=0)
        return np.asarray(x)

    def mix(
        self,
        features: list[NDArray[np.float32]],
        inputs: list[NDArray[np.float32]],
        wanted: NDArray[np.bool_] | None = None,
    ) -> NDArray[np.float32]:
        """Weighted sum of feature planes, steered by input planes; all of one shape.

        Where not `wanted` the first feature may stand instead.
        """
        rows, columns = features[0].shape
        out = np.array(features[0])
        band = max(1, _BLOCK // columns)
        for start in range(0, rows, band):
            part = slice(start, start + band)
            if wanted is None or wanted[part].any():
                steering = np.stack([i[part] for i in inputs]).reshape(len(inputs), -1)
                pictures = np.stack([f[part] for f in features]).reshape(len(features), -1)
                mixed = np.einsum("kn,kn->n", self.weights(steering), pictures)
                out[part] = mixed.reshape(-1, columns)
        return out


@lru_cache(maxsize=1)
def shipped_mixer() -> Mixer:
    """The network that ships with the package; `tests/bench/train_descreen.py` remakes it."""
    from importlib.resources import files

    with (
        files("moire").joinpath("descreen_weights.npz").open("rb") as stream,
        np.load(stream, allow_pickle=False) as data,
    ):
        count = sum(1 for key in data if key.startswith("matrix"))
        layers = tuple(
            (data[f"matrix{i}"].astype(np.float32), data[f"bias{i}"].astype(np.float32)) for i in range(count)
        )
        return Mixer(
            centre=data["centre"].astype(np.float32), scale=data["scale"].astype(np.float32), layers=layers
        )
