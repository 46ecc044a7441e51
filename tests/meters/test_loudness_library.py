"""Integrated loudness against a general loudness library, by other filters and without histograms."""

from __future__ import annotations

import pyloudnorm
import pytest

from preview.meters.loudness import LoudnessMeter
from tests.meters.signals import FULL_SCALE_V, feed, programme


# "DeMan" makes BS.1770's coefficients at 48 kHz, and the bilinear transform of the same prototype at other rates, whose
# shelf is 0.005 dB off at 44.1 kHz and 0.03 dB at 96 kHz. The library's default starts from rounded corners: it is
# 0.04 LU low on case 1 of EBU Tech 3341 too, which allows 0.1 LU.
@pytest.mark.parametrize(
    ("rate", "filters", "within_lu"),
    [
        (48_000, "DeMan", 1e-6),
        (44_100, "DeMan", 0.006),
        (96_000, "DeMan", 0.03),
        (48_000, "K-weighting", 0.1),
    ],
)
def test_integrated_loudness_agrees_with_a_loudness_library(
    rate: int, filters: str, within_lu: float
) -> None:
    volts = programme(rate, 40)
    library = pyloudnorm.Meter(rate, filters).integrated_loudness(volts / FULL_SCALE_V)
    reading = feed(LoudnessMeter(rate, 2, full_scale_v=FULL_SCALE_V), volts)
    assert reading.integrated_lufs == pytest.approx(library, abs=within_lu)
