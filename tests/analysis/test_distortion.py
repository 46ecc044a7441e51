"""Distortion measured on devices whose lines are known in closed form, and on circuits that are those devices."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.analysis.distortion import (
    AES17_BAND_HZ,
    AES17_NOTCH_Q,
    CCIF_HZ,
    SMPTE_HZ,
    SMPTE_RATIO,
    coherent,
    harmonic_distortion,
    onset,
    two_tone,
)
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.errors import UsageError
from preview.network.transfer import response
from preview.values.quality import Quality
from tests.nets import HIGH_PASS, LOW_PASS, net

Real = NDArray[np.float64]
PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "distortion.toml").read_text("utf-8"))
RATE = 192_000.0
DB_001 = 10 ** (0.01 / 20) - 1


class Device:
    """Anything without memory."""

    def __init__(self, law: Callable[[Real], Real]) -> None:
        self._law = law

    def process(self, volts_in: Real, volts_out: Real) -> None:
        volts_out[:] = self._law(volts_in)


def row(table: str) -> dict[str, Any]:
    found: dict[str, Any] = PUBLISHED[table][0]
    return found


def follower(rail_v: float) -> Netlist:
    """Gain -1 between rails."""
    return net([("R1", "in", "s", 10e3), ("R2", "s", "out", 10e3)], [("gnd", "s", "out")], rail_v=rail_v)


def running(circuit: Netlist, rate: float = RATE, quality: Quality = Quality.STANDARD) -> StageProcessor:
    return StageProcessor(circuit, sample_rate_hz=rate, channels=1, quality=quality)


def clipped_sine(c: float, orders: Real) -> Real:
    """b_n of a sine of 1 clipped at c, for odd n: integrals over a quarter period."""
    a = math.asin(c)
    b = np.zeros(len(orders))
    for i, n in enumerate(orders):
        if n == 1:
            b[i] = 2 / math.pi * (a + c * math.sqrt(1 - c * c))
        elif n % 2:
            inside = math.sin((n - 1) * a) / (2 * (n - 1)) - math.sin((n + 1) * a) / (2 * (n + 1))
            b[i] = 4 / math.pi * (inside + c * math.cos(n * a) / n)
    return b


@pytest.mark.parametrize("f", [2.0, 20.0, 997.0, 1000.0, 10_000.0, 19_900.0])
@pytest.mark.parametrize("rate", [44_100.0, 48_000.0, 192_000.0])
def test_the_window_holds_whole_periods_of_nearly_the_frequency_and_is_a_prime(f: float, rate: float) -> None:
    periods, frames = coherent(f, rate)
    assert abs(periods * rate / frames / f - 1) < 5e-4
    assert all(frames % d for d in range(2, math.isqrt(frames) + 1))


def test_frequencies_that_cannot_be_measured_are_refused() -> None:
    for f in (0.5, 25_000.0):
        with pytest.raises(UsageError, match="cannot be measured at 48000 Hz"):
            coherent(f, 48_000.0)


def test_a_cubic_and_a_square_have_the_harmonics_of_the_closed_form() -> None:
    a2, a3, peak = 0.01, 0.02, 0.8
    tone = harmonic_distortion(Device(lambda x: x + a2 * x**2 + a3 * x**3), 997.0, peak, RATE)
    assert tone.fundamental_v == pytest.approx(peak + 0.75 * a3 * peak**3, rel=1e-9)
    assert tone.harmonics_v[0] == pytest.approx(a2 * peak**2 / 2, rel=1e-9)
    assert tone.harmonics_v[1] == pytest.approx(a3 * peak**3 / 4, rel=1e-9)
    assert max(tone.harmonics_v[2:]) < 1e-12
    assert tone.dc_v == pytest.approx(a2 * peak**2 / 2, rel=1e-9)
    expected = math.hypot(a2 * peak**2 / 2, a3 * peak**3 / 4) / (peak + 0.75 * a3 * peak**3)
    assert tone.thd_f == pytest.approx(expected, rel=1e-9)
    assert tone.settled


def test_both_definitions_of_thd() -> None:
    published = row("thd_definitions")
    # Chebyshev polynomials turn a cosine into its harmonics
    law = np.polynomial.chebyshev.Chebyshev([0.0, *published["harmonics"]])
    tone = harmonic_distortion(Device(law), 500.0, 1.0, RATE)
    assert tone.thd_f == pytest.approx(published["thd_f"], rel=1e-9)
    assert tone.thd_r == pytest.approx(published["thd_r"], rel=1e-9)


def test_a_circuit_that_clips_hard_has_the_harmonics_of_a_clipped_sine() -> None:
    published = row("clipped_sine")
    c = published["threshold"]
    tone = harmonic_distortion(running(follower(c)), 997.0, 1.0, RATE)
    found = (tone.fundamental_v, *tone.harmonics_v)
    for n in (1, 3, 5, 7, 9):
        assert found[n - 1] == pytest.approx(abs(published[f"b{n}"]), rel=DB_001)
    assert max(found[1::2]) < 1e-6
    orders = np.arange(1, int(tone.band_hz / tone.frequency_hz) + 1)
    b = clipped_sine(c, orders)
    # the published figures are of a numerical integration over 2^20 points
    assert b[[0, 2, 4, 6, 8]] == pytest.approx([published[f"b{n}"] for n in (1, 3, 5, 7, 9)], abs=3e-12)
    assert tone.thd_f == pytest.approx(float(np.linalg.norm(b[1:]) / b[0]), rel=DB_001)


def test_all_harmonics_of_a_low_tone_come_to_the_published_distortion() -> None:
    # at 40 Hz the 2000th harmonic is the last that is counted; what is above is below 1e-7 of all
    table = row("clipped_sine_table")
    for c, percent, fundamental in zip(
        table["threshold"], table["thd_f_percent"], table["fundamental"], strict=True
    ):
        tone = harmonic_distortion(running(follower(c)), 40.0, 1.0, RATE)
        assert 100 * tone.thd_f == pytest.approx(percent, abs=0.5e-4 + percent * 1e-5)
        assert tone.fundamental_v == pytest.approx(fundamental, abs=0.6e-6)
    assert 100 * tone.thd_f < row("waveforms")["square_thd_f_percent"]


def test_thd_n_is_behind_the_standard_notch_and_low_pass() -> None:
    published = row("aes17")
    assert published["notch_q"][0] <= AES17_NOTCH_Q <= published["notch_q"][1]
    assert published["low_pass_hz"] == AES17_BAND_HZ
    a3, peak = 0.02, 0.8
    device = Device(lambda x: x + a3 * x**3)
    third = a3 * peak**3 / 4 / (peak + 0.75 * a3 * peak**3)
    x = AES17_NOTCH_Q * (3 - 1 / 3)
    behind = third * x / math.sqrt(1 + x * x)
    assert harmonic_distortion(device, 997.0, peak, RATE).thd_n == pytest.approx(
        behind / math.hypot(1, third), rel=1e-6
    )
    # 7 kHz: the third harmonic is above the low-pass
    above = harmonic_distortion(device, 7000.0, peak, RATE)
    assert above.thd_n < 1e-9
    assert above.thd_f == pytest.approx(third, rel=1e-9)
    # noise adds to both by power
    noise = harmonic_distortion(Device(lambda x: x), 997.0, 1.0, RATE, noise_vrms=1e-3)
    assert noise.thd_n == pytest.approx(1e-3 * math.sqrt(2), rel=1e-5)


def test_aliases_do_not_hide_under_harmonics() -> None:
    # clipping in samples folds back: those lines count in THD+N, not among the harmonics
    tone = harmonic_distortion(Device(lambda x: np.clip(x, -0.7, 0.7)), 5000.0, 1.0, 48_000.0)
    assert tone.thd_n > 0.02
    assert max(tone.harmonics_v[0::2]) < 1e-9


def test_the_circuit_runs_until_it_is_steady() -> None:
    slow = HIGH_PASS.with_values({"C1": 10e-6})  # 0.1 s, and a tone that begins at once
    tone = harmonic_distortion(running(slow, 48_000.0), 100.0, 0.1, 48_000.0)
    assert tone.settled
    assert tone.dc_v == pytest.approx(0.0, abs=1e-8)
    assert tone.fundamental_v == pytest.approx(0.1 * abs(response(slow, [tone.frequency_hz])[0]), rel=1e-5)
    assert tone.thd_f < 1e-7


def test_smpte_and_ccif_products_of_a_polynomial() -> None:
    assert row("smpte")["tones_hz"] == list(SMPTE_HZ)
    assert row("smpte")["ratio"] == SMPTE_RATIO
    assert row("ccif")["tones_hz"] == list(CCIF_HZ)
    a2, a3, peak = 0.01, 0.02, 1.0
    square, cube = Device(lambda x: x + a2 * x**2), Device(lambda x: x + a3 * x**3)
    # SMPTE: each sideband of second order has a2 A1 A2
    found = two_tone(square, "smpte", peak, RATE)
    assert found.rms == pytest.approx(math.sqrt(2) * a2 * 0.8 * peak, rel=1e-9)
    assert found.second == pytest.approx(2 * a2 * 0.8 * peak, rel=1e-9)
    assert found.third < 1e-12
    first, second = 0.8 * peak, 0.2 * peak
    carrier = second + a3 * (0.75 * second**3 + 1.5 * first**2 * second)
    found = two_tone(cube, "smpte", peak, RATE)
    assert found.third == pytest.approx(2 * 0.75 * a3 * first**2 * second / carrier, rel=1e-9)
    # CCIF: A1 = A2 = A
    a = 0.5 * peak
    found = two_tone(square, "ccif", peak, RATE)
    assert found.second == pytest.approx(a2 * a * a / (2 * a), rel=1e-9)
    found = two_tone(cube, "ccif", peak, RATE)
    main = a + a3 * (0.75 + 1.5) * a**3
    assert found.third == pytest.approx(2 * 0.75 * a3 * a**3 / (2 * main), rel=1e-9)
    assert math.isnan(found.rms)


@pytest.mark.parametrize("f", [50.0, 1000.0, 15_000.0])
def test_clipping_begins_at_the_level_of_the_closed_form(f: float) -> None:
    found = onset(LOW_PASS, f, "rail", sample_rate_hz=RATE, quality=Quality.STANDARD)
    assert found is not None
    assert found.opamp == "U1"
    expected = 13.5 / abs(response(LOW_PASS, [f])[0])
    assert 20 * math.log10(found.level_v / expected) == pytest.approx(0.0, abs=0.02)
    assert onset(LOW_PASS, f, "slew", sample_rate_hz=RATE, quality=Quality.DRAFT) is None


@pytest.mark.slow
def test_slewing_begins_where_the_sine_is_as_fast_as_the_slew_rate() -> None:
    model = OpAmpModel(
        "test", gain_bandwidth_hz=30e6, open_loop_gain=1e6, slew_up_v_per_s=0.5e6, slew_down_v_per_s=0.5e6
    )
    circuit = follower(15.0)
    circuit = replace(circuit, opamps=tuple(replace(o, model=model) for o in circuit.opamps))
    found = onset(circuit, 20e3, "slew", sample_rate_hz=RATE, quality=Quality.STANDARD)
    assert found is not None
    assert found.level_v == pytest.approx(0.5e6 / (2 * math.pi * 20e3), rel=3e-3)
    clips = onset(circuit, 20e3, "rail", sample_rate_hz=RATE, quality=Quality.STANDARD)
    assert clips is None or clips.level_v > 15.0  # slewing it does not reach the rails at 15 V
