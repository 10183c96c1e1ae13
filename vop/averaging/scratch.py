"""Memory that is used again for each tile: fresh pages cost more than what is written to them."""

from __future__ import annotations

import math

import numpy as np


class Scratch:
    """Arrays by name, each kept until a larger one of that name is asked for."""

    def __init__(self) -> None:
        self._flat: dict[str, np.ndarray] = {}

    def array(self, name: str, shape: tuple[int, ...], dtype: np.dtype | type = np.float64) -> np.ndarray:
        """An array of this shape with any contents; what was handed out under the name before is void."""
        size = math.prod(shape)
        flat = self._flat.get(name)
        if flat is None or flat.size < size or flat.dtype != dtype:
            self._flat.pop(name, None)
            flat = self._flat[name] = np.empty(size, dtype)
        return flat[:size].reshape(shape)
