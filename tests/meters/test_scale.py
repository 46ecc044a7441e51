"""Readings on the scales of the trade, against the published levels."""

from __future__ import annotations

import math
import tomllib
from pathlib import Path
from typing import Any

import pytest

from preview.meters.rms import RmsMeter
from preview.meters.sample_peak import SamplePeakMeter
from preview.meters.scale import Scale, on_scale, written
from preview.values.levels import parse_full_scale
from tests.meters.signals import feed, sine

LEVELS: list[dict[str, Any]] = tomllib.loads(
    (Path(__file__).parents[1] / "published" / "levels.toml").read_text(encoding="utf-8")
)["level"]
EBU = parse_full_scale("+18 dBu")


@pytest.mark.parametrize("level", LEVELS, ids=lambda level: level["name"])
def test_published_volts_are_at_their_published_level(level: dict[str, Any]) -> None:
    number, unit = level["name"].partition(" (")[0].split()
    scale = Scale(unit)
    for measured, key in (("peak", "volts_peak_sine"), ("rms", "volts_rms")):
        got = on_scale(level[key], scale, measured=measured, full_scale_v=1.0)
        assert got == pytest.approx(float(number), abs=1e-9)


def test_a_sine_at_full_scale_is_0_dbfs_peak_and_rms_by_aes17() -> None:
    # AES17: the level in dBFS is that of a sine re one at full scale, 3.01 dB more than its mean square says
    volts = sine(48_000, 1000, 1.0, EBU.volts)
    peak = feed(SamplePeakMeter(48_000, 1), volts).peak_v[0]
    rms = feed(RmsMeter(48_000, 1), volts).mean_rms_v[0]
    assert on_scale(peak, Scale.DBFS, measured="peak", full_scale_v=EBU.volts) == pytest.approx(0.0, abs=1e-6)
    assert on_scale(rms, Scale.DBFS, measured="rms", full_scale_v=EBU.volts) == pytest.approx(0.0, abs=1e-6)
    plain = on_scale(rms, Scale.DBFS, measured="rms", full_scale_v=EBU.volts, sine_referenced=False)
    assert plain == pytest.approx(-3.0103, abs=5e-5)


def test_silence_is_minus_infinity_and_0_v() -> None:
    assert on_scale(0.0, Scale.DBU, measured="rms", full_scale_v=1.0) == -math.inf
    assert on_scale(0.0, Scale.VOLTS, measured="rms", full_scale_v=1.0) == 0.0


@pytest.mark.parametrize(
    ("volts", "scale", "measured", "text"),
    [
        (8.70143, Scale.VOLTS, "peak", "8.70 V peak"),
        (1.22765, Scale.VOLTS, "rms", "1.23 V rms"),
        (1.22765, Scale.DBU, "rms", "+4.0 dBu"),
        (1.0, Scale.DBV, "rms", "0.0 dBV"),
        (0.870143, Scale.DBFS, "peak", "-20.0 dBFS (full scale +18 dBu)"),
    ],
)
def test_a_reading_is_written_with_its_unit_and_dbfs_with_full_scale(
    volts: float, scale: Scale, measured: Any, text: str
) -> None:
    assert written(volts, scale, measured=measured, full_scale=EBU) == text
