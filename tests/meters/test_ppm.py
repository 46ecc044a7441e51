"""Peak programme meters against the burst and return tables of IEC 60268-10."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.meters.ballistics import steady_ratio
from preview.meters.ppm import PpmMeter, PpmType
from preview.values.levels import vrms_from_dbu
from tests.meters.signals import PUBLISHED, db, feed, row, sine

RATES = [44_100, 48_000, 96_000]
TABLE = {"I": "I", "IIa": "II (IIa and IIb)", "IIb": "II (IIa and IIb)"}
TOLERANCES = {"I": "I tolerances", "IIa": "II tolerances", "IIb": "II tolerances"}


def burst_db(kind: PpmType, rate: int, milliseconds: float) -> float:
    """Highest reading of a burst of 5 kHz, re its steady reading."""
    meter = PpmMeter(rate, 1, kind=kind)
    burst = np.concatenate([sine(rate, 5000, milliseconds * 1e-3), np.zeros(200)])
    once = feed(meter, burst).max_vrms[0]
    return db(once / feed(meter, sine(rate, 5000, 2.0)).max_vrms[0])


@pytest.mark.parametrize("rate", RATES)
@pytest.mark.parametrize("kind", ["I", "IIa", "IIb"])
def test_bursts_read_as_in_the_table(kind: PpmType, rate: int) -> None:
    table = next(r for r in _rows(TABLE[kind]) if "burst_ms" in r)
    limits = row("ppm", type=TOLERANCES[kind])
    assert limits["burst_ms"] == table["burst_ms"]
    for burst, wanted, limit in zip(
        table["burst_ms"], table["reading_db"], limits["tolerance_db"], strict=True
    ):
        assert burst_db(kind, rate, burst) == pytest.approx(wanted, abs=limit), burst


@pytest.mark.parametrize("kind", ["I", "IIa", "IIb"])
def test_a_burst_of_the_integration_time_reads_2_db_low(kind: PpmType) -> None:
    # IEC 60268-10: the definition of integration time
    integration_ms = next(r for r in _rows(TABLE[kind]) if "integration_ms" in r)["integration_ms"]
    assert burst_db(kind, 48_000, integration_ms) == pytest.approx(-2.0, abs=0.05)


@pytest.mark.parametrize("rate", RATES)
@pytest.mark.parametrize("kind", ["I", "IIa", "IIb"])
def test_the_reading_returns_in_the_published_time_at_constant_speed(kind: PpmType, rate: int) -> None:
    published = next(r for r in _rows(TABLE[kind]) if "return_s" in r)
    meter = PpmMeter(rate, 1, kind=kind)
    before = feed(meter, sine(rate, 1000, 1.0)).level_vrms[0]
    quarter = np.zeros(round(published["return_s"] / 4 * rate))
    for n in range(1, 5):
        fallen = db(feed(meter, quarter).level_vrms[0] / before)
        assert fallen == pytest.approx(-published["return_db"] * n / 4, abs=0.05)


def test_type_iib_falls_from_plus_12_to_minus_12_in_2_8_s() -> None:
    published = row("ppm", type="IIb procedure")
    rate = 48_000
    meter = PpmMeter(rate, 1, kind="IIb")
    tone = sine(rate, 1000, 2.0, math.sqrt(2) * vrms_from_dbu(published["from_db"]))
    assert feed(meter, tone).mark[0] == pytest.approx(published["from_db"], abs=0.02)
    seconds = 0.0
    while feed(meter, np.zeros(rate // 100)).mark[0] > published["to_db"]:
        seconds += 0.01
    assert seconds == pytest.approx(published["return_s"], abs=published["return_tol_s"])


@pytest.mark.parametrize("rate", [*RATES, 192_000])
@pytest.mark.parametrize(
    ("kind", "dbu", "mark"),
    [("I", 6.0, 0.0), ("I", -3.0, -9.0), ("IIa", 0.0, 4.0), ("IIa", 8.0, 6.0), ("IIb", 9.0, 9.0)],
)
def test_a_steady_tone_of_1_khz_reads_its_level_on_the_scale(
    kind: PpmType, dbu: float, mark: float, rate: int
) -> None:
    # IEC 60268-10 scales; the row says so in words
    assert "mark 4 = alignment (0 dBu), mark 6 = PML (+8 dBu)" in row("ppm", type="scales")["iia_marks"]
    assert "0 dB = +6 dBu (1.55 V), alignment at -9" in row("ppm", type="scales")["din"]
    reading = feed(PpmMeter(rate, 1, kind=kind), sine(rate, 1000, 2.0, math.sqrt(2) * vrms_from_dbu(dbu)))
    assert reading.mark[0] == pytest.approx(mark, abs=0.02)
    assert reading.kind == kind


@pytest.mark.parametrize("rate", RATES)
def test_the_reading_is_within_half_a_db_from_31_5_hz_to_16_khz(rate: int) -> None:
    for kind in ("I", "IIb"):
        for frequency_hz in (31.5, 100.0, 10_000.0, rate / 4, 16_000.0):
            for phase in (0.0, 45.0):
                reading = feed(PpmMeter(rate, 1, kind=kind), sine(rate, frequency_hz, 1.0, 1.0, phase))
                assert abs(db(reading.max_vrms[0] / math.sqrt(0.5))) < 0.5


def test_the_steady_charge_is_where_as_much_flows_in_as_out() -> None:
    # by plain quadrature of a rectified sine
    y = steady_ratio(2e-3, 1.0)
    u = np.abs(np.sin((np.arange(1_000_000) + 0.5) / 1_000_000 * np.pi))
    assert np.maximum(u - y, 0.0).mean() / 2e-3 == pytest.approx(y * (u <= y).mean() / 1.0, rel=1e-4)


def _rows(kind: str) -> list[dict]:
    return [r for r in PUBLISHED["ppm"] if r["type"] == kind]
