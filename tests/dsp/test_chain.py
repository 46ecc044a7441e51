"""Bypass and change of circuit without a gap."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.dsp.chain import FADE_S, SETTLE_S, Chain
from preview.dsp.stage import StageProcessor
from preview.network.transfer import response
from preview.values.quality import Quality
from tests.nets import HIGH_PASS, LOW_PASS, SALLEN_KEY

RATE = 48_000
Real = NDArray[np.float64]


def processor(circuit: object = LOW_PASS, quality: Quality = Quality.DRAFT) -> StageProcessor:
    return StageProcessor(circuit, sample_rate_hz=RATE, channels=1, quality=quality)  # type: ignore[arg-type] # a Netlist


def tone(seconds: float, f: float = 200.0) -> Real:
    return np.sin(2 * np.pi * f * np.arange(round(seconds * RATE)) / RATE)[:, None]


def run(chain: Chain, volts: Real, size: int = 256) -> Real:
    out = np.empty_like(volts)
    for start in range(0, len(volts), size):
        chain.process(volts[start : start + size], out[start : start + size])
    return out


def high_share_db(out: Real) -> float:
    """Energy above 4 kHz against that of the 200 Hz tone [dB]."""
    spectrum = np.abs(np.fft.rfft(out[:, 0] * np.blackman(len(out)))) ** 2
    f = np.fft.rfftfreq(len(out), 1 / RATE)
    return float(10 * math.log10(spectrum[f > 4000].sum() / spectrum[(f > 150) & (f < 250)].sum()))


def test_alone_it_is_its_stage_to_the_bit() -> None:
    volts = np.random.default_rng(1).normal(0, 5, (5000, 1))
    expected = np.empty_like(volts)
    processor().process(volts, expected)
    np.testing.assert_array_equal(run(Chain(processor()), volts, 77), expected)


def test_bypass_is_the_input_at_the_same_delay_to_the_bit() -> None:
    chain = Chain(processor())
    chain.set_bypass(True)
    volts = np.random.default_rng(2).normal(0, 5, (9000, 1))
    out = run(chain, volts)
    start = round(FADE_S * RATE) + chain.latency_frames
    np.testing.assert_array_equal(out[start:], volts[start - chain.latency_frames : -chain.latency_frames])


def test_bypass_and_back_do_not_click() -> None:
    chain = Chain(processor())
    volts = tone(1.0)
    out = [run(chain, volts[:16_000])]
    chain.set_bypass(True)
    assert chain.bypassed
    out.append(run(chain, volts[16_000:32_000]))
    chain.set_bypass(False)
    out.append(run(chain, volts[32_000:]))
    assert high_share_db(np.concatenate(out)[2000:]) < -90.0


@pytest.mark.parametrize("circuit", [HIGH_PASS, SALLEN_KEY])
def test_swap_of_the_circuit_fades_and_ends_in_the_new_one(circuit: object) -> None:
    chain = Chain(processor())
    volts = tone(1.0)
    first = run(chain, volts[:20_000])
    new = processor(circuit)
    chain.swap(new)
    assert chain.swapping
    assert chain.processor is new
    second = run(chain, volts[20_000:])
    assert not chain.swapping
    both = np.concatenate([first, second])
    assert high_share_db(both[2000:]) < -90.0
    gain = abs(response(circuit, [200.0])[0])  # type: ignore[arg-type] # a Netlist
    assert np.abs(second[-5000:]).max() == pytest.approx(gain, rel=1e-3)


def test_swaps_that_come_quickly_end_in_the_last() -> None:
    chain = Chain(processor())
    volts = tone(0.5)
    chain.swap(processor(HIGH_PASS))
    run(chain, volts[:1000])
    chain.swap(processor(SALLEN_KEY))
    last = processor(LOW_PASS.with_values({"R2": 22e3}))
    chain.swap(last)
    run(chain, volts[1000:])
    assert chain.processor is last
    assert not chain.swapping


def test_a_swap_takes_settling_and_fading_time() -> None:
    chain = Chain(processor())
    chain.swap(processor(HIGH_PASS))
    frames = 0
    while chain.swapping:
        run(chain, np.zeros((16, 1)), 16)
        frames += 16
    assert frames == pytest.approx((SETTLE_S + FADE_S) * RATE, abs=32)


def test_quality_can_change_while_it_runs() -> None:
    chain = Chain(processor())
    volts = tone(0.6)
    first = run(chain, volts[:10_000])
    chain.swap(processor(quality=Quality.FINE))
    out = np.concatenate([first, run(chain, volts[10_000:])])
    assert high_share_db(out[2000:]) < -90.0
    assert chain.processor.quality is Quality.FINE


def test_reset_takes_the_waiting_stage_and_empties_it() -> None:
    chain = Chain(processor())
    run(chain, tone(0.1))
    new = processor(HIGH_PASS)
    chain.swap(new)
    chain.reset()
    assert not chain.swapping
    assert np.abs(run(chain, np.zeros((500, 1)))).max() == 0.0
    assert chain.processor is new


def test_readings_are_those_of_the_stage_that_is_heard() -> None:
    chain = Chain(processor())
    run(chain, tone(0.1))
    assert chain.readings()[0].peak_v > 5.0
    chain.clear_readings()
    run(chain, np.zeros((2000, 1)))
    chain.clear_readings()
    run(chain, np.zeros((2000, 1)))
    assert chain.readings()[0].peak_v < 1e-3
