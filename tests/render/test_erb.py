"""ERB values against the published table."""

import numpy as np
import pytest
from sweepset.render.erb import band_centres_hz, band_weights, erb_hz, erb_number, hz_of_number


def test_bandwidths_and_numbers_of_the_table():
    # check-values g1, g2: Glasberg and Moore, Hearing Research 47 (1990) 103-138.
    hz = [100, 500, 1000, 2000, 4000, 8000, 10_000]
    np.testing.assert_allclose(
        erb_hz(hz), [35.49, 78.67, 132.64, 240.58, 456.46, 888.21, 1104.09], atol=0.005
    )
    np.testing.assert_allclose(
        erb_number(hz[:6]), [3.370, 10.767, 15.621, 21.155, 27.107, 33.295], atol=5e-4
    )
    np.testing.assert_allclose(hz_of_number(erb_number(hz)), hz, rtol=1e-12)


def test_bands_stand_one_bandwidth_apart_within_what_the_rate_holds():
    centres = band_centres_hz(48_000)
    np.testing.assert_allclose(np.diff(erb_number(centres)), 1.0)
    assert centres[0] == pytest.approx(50.0)
    assert centres[-1] <= 16_000
    assert band_centres_hz(8_000)[-1] <= 3_600


def test_a_band_is_as_wide_as_its_equivalent_rectangle():
    # The definition: the filter's power, integrated, over its peak.
    freq = np.arange(0.0, 24_000.0, 0.5)
    centres = np.array([500.0, 1000.0, 4000.0])
    area = band_weights(centres, freq).sum(axis=0) * 0.5
    np.testing.assert_allclose(area, erb_hz(centres), rtol=2e-3)
