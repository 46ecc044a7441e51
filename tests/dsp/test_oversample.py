"""Interpolators and decimators: flat, steep, aligned."""

from __future__ import annotations

import numpy as np
import pytest

from preview.dsp.oversample import ATTENUATION_DB, LATENCY_FRAMES, PASSBAND_RATIO, design, factor_for
from preview.values.quality import Quality

FACTORS = (4, 8, 16, 32)


@pytest.mark.parametrize(
    ("quality", "rate", "factor"),
    [
        (Quality.DRAFT, 48_000, 8),
        (Quality.STANDARD, 44_100, 16),
        (Quality.STANDARD, 96_000, 8),
        (Quality.STANDARD, 192_000, 4),
        (Quality.FINE, 8_000, 32),
        (Quality.FINE, 88_200, 16),
        (Quality.DRAFT, 192_000, 4),
    ],
)
def test_factor_keeps_the_step_about_the_same(quality: Quality, rate: float, factor: int) -> None:
    assert factor_for(quality, rate) == factor


@pytest.mark.parametrize("factor", FACTORS)
def test_interpolation_is_flat_to_the_band_edge_and_kills_the_images(factor: int) -> None:
    filters = design(factor)
    band = np.linspace(0.0, PASSBAND_RATIO, 300)
    assert 20 * np.log10(np.abs(filters.up_response(band))).max() < 1.5e-5
    assert 20 * np.log10(np.abs(filters.up_response(band))).min() > -1.5e-5
    images = np.linspace(1.0 - PASSBAND_RATIO, factor / 2, 4000)
    assert 20 * np.log10(np.abs(filters.up_response(images)) + 1e-30).max() < -ATTENUATION_DB + 1.0


@pytest.mark.parametrize("factor", FACTORS)
def test_decimation_undoes_the_droop_of_a_mean(factor: int) -> None:
    filters = design(factor)
    band = np.linspace(0.0, PASSBAND_RATIO, 300)
    flat = filters.down_response(band) * np.sinc(band / factor)
    np.testing.assert_allclose(np.abs(flat), 1.0, atol=3e-6)


@pytest.mark.parametrize("factor", FACTORS)
def test_filters_of_all_factors_have_one_delay(factor: int) -> None:
    up_1, up_2, down_2, down_1 = (len(h) for h in design(factor).prototypes)
    # in steps: both halves, the half step of the mean, one step of look-ahead, less the phase the decimator reads at
    delay = (
        (up_1 - 1) / 2 * (factor / 2)
        + (up_2 - 1) / 2
        + (down_2 - 1) / 2
        + (down_1 - 1) / 2 * (factor / 2)
        + 0.5
    )
    read_at = (factor / 2 - 2) + factor / 2
    assert (delay - read_at) / factor == pytest.approx(LATENCY_FRAMES, abs=1e-9)
