"""Every bundled stage runs: a burst of noise through its circuit, with its own op-amps."""

from __future__ import annotations

import numpy as np
import pytest

from preview.circuit.library import find_stage, stage_names
from preview.circuit.netlist import netlist
from preview.dsp.stage import StageProcessor
from preview.network.transfer import response
from preview.values.quality import Quality

RATE_HZ = 48e3


@pytest.mark.parametrize("name", stage_names())
def test_a_burst_of_noise_comes_out_finite_and_within_the_rails(name: str) -> None:
    stage = find_stage(name)
    processor = StageProcessor(netlist(stage), sample_rate_hz=RATE_HZ, channels=1, quality=Quality.DRAFT)
    volts = np.random.default_rng(7).standard_normal((2400, 1))
    heard = np.zeros_like(volts)
    processor.process(volts, heard)
    supply = stage.supply
    assert np.isfinite(heard).all()
    assert 1e-4 < np.abs(heard).max() < 1.2 * (supply.positive_v - supply.negative_v)  # decimator: overshoot


@pytest.mark.parametrize("name", stage_names())
def test_quiet_noise_is_heard_as_the_exact_response_says(name: str) -> None:
    # Noise of 2 to 16 kHz that repeats: the third turn is the periodic state, and its spectrum the gain times it.
    stage = find_stage(name)
    frames = 1200
    f = np.fft.rfftfreq(frames, 1 / RATE_HZ)
    band = (f > 2000) & (f < 16e3)
    spectrum = band * np.exp(2j * np.pi * np.random.default_rng(7).random(len(f)))
    turn = 1e-4 * np.fft.irfft(spectrum, frames)
    for output in ("out", *stage.outputs):
        circuit = netlist(stage, output=output)
        processor = StageProcessor(circuit, sample_rate_hz=RATE_HZ, channels=1, quality=Quality.DRAFT)
        volts = np.tile(turn, 4)[:, None]
        heard = np.zeros_like(volts)
        processor.process(volts, heard)
        start = 2 * frames + processor.latency_frames
        found = np.fft.rfft(heard[start : start + frames, 0])[band]
        wanted = response(circuit, f[band]) * np.fft.rfft(turn)[band]
        assert np.linalg.norm(found - wanted) < 0.01 * np.linalg.norm(wanted), output
