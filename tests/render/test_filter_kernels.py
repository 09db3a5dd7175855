"""The recursive filter against scipy's, block by block."""

import numpy as np
from scipy.signal import butter, lfilter, sosfilt
from sweepset.render.filter_kernels import recursive


def test_any_order_in_blocks_is_scipys_filter():
    generator = np.random.default_rng(1)
    x = generator.normal(size=(500, 3))
    for order in (1, 2, 3, 5):
        b, a = butter(order, 0.2)
        state, made = np.zeros((order, 3)), []
        for block in np.split(x, [1, 40, 41, 300]):
            out = np.empty_like(block)
            recursive(b, a, block, state, out)
            made.append(out)
        np.testing.assert_allclose(
            np.concatenate(made), lfilter(b, a, x, axis=0), rtol=1e-12, atol=1e-14
        )


def test_sections_in_a_row_are_scipys_cascade():
    sections = butter(4, (0.1, 0.3), "bandpass", output="sos")
    x = np.random.default_rng(2).normal(size=(300, 2))
    made = x
    for section in sections:
        out = np.empty_like(made)
        recursive(section[:3], section[3:], made, np.zeros((2, 2)), out)
        made = out
    np.testing.assert_allclose(made, sosfilt(sections, x, axis=0), rtol=1e-11, atol=1e-14)
