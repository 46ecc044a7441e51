"""What folds back into the band when op-amps as they are, or diodes, are driven 20 dB over."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.network.transfer import response
from preview.values.quality import Quality
from tests.dsp.test_diodes import clipper
from tests.dsp.test_macromodel import with_model
from tests.nets import HIGH_PASS, LOW_PASS, RAIL_V, SALLEN_KEY

pytestmark = [pytest.mark.slow, pytest.mark.timeout(900)]

RATE = 48_000
MODEL = OpAmpModel(
    "test",
    gain_bandwidth_hz=3e6,
    open_loop_gain=2e5,
    slew_up_v_per_s=13e6,
    slew_down_v_per_s=13e6,
    output_resistance_ohm=125.0,
)
"""Figures of a common JFET type."""

PROMISE = {
    (Quality.STANDARD, 997): -100.0,
    (Quality.STANDARD, 4999): -80.0,
    (Quality.FINE, 997): -120.0,
    (Quality.FINE, 4999): -95.0,
}
"""Strongest alias below 20 kHz re the fundamental [dB]."""


def strongest_alias_db(circuit: Netlist, f: int, amplitude: float, quality: Quality) -> float:
    """Of the second second: every hertz below 20 kHz that is no harmonic, re the fundamental [dB].

    A tone of a whole number of hertz, prime, so that what folds back misses the harmonics.
    """
    stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=1, quality=quality)
    volts = amplitude * np.sin(2 * np.pi * f * np.arange(2 * RATE) / RATE)[:, None]
    out = np.empty_like(volts)
    stage.process(volts, out)
    assert stage.fault is None
    line = np.abs(np.fft.rfft(out[RATE:, 0]))
    assert line[3 * f] > 0.03 * line[f]  # it does clip
    others = line[1:20_001].copy()
    order = np.arange(1, 20_000 // f + 1)
    others[order * f - 1] = 0.0
    return float(20 * math.log10(others.max() / line[f]))


@pytest.mark.parametrize(("quality", "f"), list(PROMISE))
@pytest.mark.parametrize("name", ["low-pass", "high-pass", "sallen-key"])
def test_rails_20_db_over_with_a_real_op_amp(name: str, f: int, quality: Quality) -> None:
    circuit = with_model(
        {"low-pass": LOW_PASS, "high-pass": HIGH_PASS, "sallen-key": SALLEN_KEY}[name], MODEL
    )
    amplitude = 10.0 * RAIL_V / abs(response(circuit, [f])[0])
    found_db = strongest_alias_db(circuit, f, amplitude, quality)
    print(f"{name} {quality} {f} Hz: {found_db:.1f} dB")  # noqa: T201 - shown with -s: the figure that was reached
    assert found_db < PROMISE[quality, f]


@pytest.mark.parametrize(("quality", "f"), list(PROMISE))
def test_back_to_back_diodes_20_db_over(f: int, quality: Quality) -> None:
    # 0.6 V in would be 6 V out, ten times what the diodes let pass
    found_db = strongest_alias_db(clipper(MODEL), f, 0.6, quality)
    print(f"clipper {quality} {f} Hz: {found_db:.1f} dB")  # noqa: T201 - shown with -s: the figure that was reached
    assert found_db < PROMISE[quality, f]
