"""Three-layer slab, the commonest case, by a fast path: one arc tangent and one cubic-order step an iteration."""

from __future__ import annotations

import numpy as np

from .layers import Array, Layers


def three_layer_index(layers: Layers, order: Array) -> Array:
    from .slab import _roots

    return np.sqrt(_roots(layers, order))
