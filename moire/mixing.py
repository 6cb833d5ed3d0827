"""Per-pixel mixing of feature pictures by a small network trained on simulated prints."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

_BLOCK = 1 << 16


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
        """Mixing weights, shape (pixels, features), of inputs of shape (pixels, inputs)."""
        x = (inputs - self.centre) / self.scale
        for matrix, bias in self.layers[:-1]:
            x = np.maximum(x @ matrix + bias, 0)
        x = x @ self.layers[-1][0] + self.layers[-1][1]
        x = np.exp(x - x.max(axis=1, keepdims=True))
        return np.asarray(x / x.sum(axis=1, keepdims=True))

    def mix(
        self, features: list[NDArray[np.float32]], inputs: list[NDArray[np.float32]]
    ) -> NDArray[np.float32]:
        """Weighted sum of feature planes, steered by input planes; all of one shape."""
        shape = features[0].shape
        flat_features = [f.ravel() for f in features]
        flat_inputs = [i.ravel() for i in inputs]
        out = np.empty(flat_features[0].size, np.float32)
        for start in range(0, out.size, _BLOCK):
            part = slice(start, start + _BLOCK)
            weights = self.weights(np.stack([i[part] for i in flat_inputs], axis=1))
            out[part] = np.einsum("nk,kn->n", weights, np.stack([f[part] for f in flat_features]))
        return out.reshape(shape)


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
