"""A linear recursive filter, sample by sample: transposed direct form II.

Why not the library's: importing it costs a second, a third of a short render.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ..models.jit import kernel

Array = npt.NDArray[np.float64]


@kernel(boundscheck=False)
def recursive(b: Array, a: Array, x: Array, state: Array, out: Array) -> None:
    """Filter ``x`` (frames, channels) into ``out``; ``b`` and ``a`` have K + 1 entries, ``a[0]`` 1.

    ``state`` (K, channels) is carried on from call to call.
    """
    order = len(a) - 1
    for c in range(x.shape[1]):
        for n in range(x.shape[0]):
            v = x[n, c]
            y = b[0] * v + state[0, c]
            for k in range(order - 1):
                state[k, c] = b[k + 1] * v - a[k + 1] * y + state[k + 1, c]
            state[order - 1, c] = b[order] * v - a[order] * y
            out[n, c] = y
