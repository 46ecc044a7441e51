"""When op-amps come to their limits: times against closed forms, counts against the running statistics."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.events import LOG_FRAMES, EventFinder, LimitEvent
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.nets import LOW_PASS, RAIL_V, TWO_SECTIONS, net

Real = NDArray[np.float64]

REAL = OpAmpModel(
    "test",
    gain_bandwidth_hz=3e6,
    open_loop_gain=2e5,
    slew_up_v_per_s=0.5e6,
    slew_down_v_per_s=0.5e6,
    output_resistance_ohm=125.0,
)


def found(
    circuit: Netlist, volts: Real, rate: float, *, piece: int = LOG_FRAMES
) -> tuple[list[LimitEvent], dict[str, int]]:
    """Every visit while the signal, and enough silence to see its end, goes through."""
    columns = volts.reshape(len(volts), -1)
    stage = StageProcessor(circuit, sample_rate_hz=rate, channels=columns.shape[1], quality=Quality.STANDARD)
    finder = EventFinder(stage)
    padded = np.concatenate([columns, np.zeros((stage.latency_frames, columns.shape[1]))])
    out = np.empty_like(padded)
    counted: dict[str, int] = {}
    for first in range(0, len(padded), piece):
        for one in finder.process(padded[first : first + piece], out[first : first + piece]):
            counted[one.designator] = counted.get(one.designator, 0) + one.clip_events
    finder.finish()
    whole = np.empty_like(padded)
    StageProcessor(circuit, sample_rate_hz=rate, channels=columns.shape[1], quality=Quality.STANDARD).process(
        padded, whole
    )
    np.testing.assert_array_equal(out, whole)  # looking does not change what is heard
    return sorted(finder.events, key=lambda e: (e.designator, e.kind, e.start_s)), counted


def recovering_low_pass(u: float, pulse_s: float) -> tuple[float, float]:
    """When the low-pass with C1 = 100 nF comes to its rail after a step to ``u``, and leaves it, both from the step.

    Closed form: it charges with R2 C1 until the output reaches the rail E at x = E. There the loop is open: the
    summing node is a divider and C1 goes on towards (u + E) R2 / (R1 + R2) with (R1 || R2) C1; after the pulse towards
    E R2 / (R1 + R2), and at x = E the output comes back.
    """
    rail, c = RAIL_V, 100e-9
    tau_closed, tau_open = 100e3 * c, 10e3 * 100e3 / 110e3 * c
    enter = -tau_closed * math.log(1 - rail / (10 * u))
    x1, x2 = (u + rail) * 100e3 / 110e3, rail * 100e3 / 110e3
    held = x1 + (rail - x1) * math.exp(-(pulse_s - enter) / tau_open)
    return enter, pulse_s + tau_open * math.log((held - x2) / (rail - x2))


@pytest.mark.parametrize("rate", [8_000, 44_100, 48_000, 96_000])
def test_pulses_into_a_low_pass_clip_when_the_closed_form_says(rate: int) -> None:
    circuit = LOW_PASS.with_values({"C1": 100e-9})
    rng = np.random.default_rng(9)
    volts = np.zeros((round(2.0 * rate), 2))
    expected: list[tuple[int, float, float, str]] = []
    for channel in range(2):
        at = 0.02
        while at < 1.7:
            u, length_s = float(rng.uniform(3.0, 15.0)), float(rng.uniform(0.01, 0.05))
            first, last = round(at * rate), round((at + length_s) * rate)
            sign = rng.choice([-1.0, 1.0])
            volts[first:last, channel] = sign * u
            enter, leave = recovering_low_pass(u, (last - first) / rate)
            # a step between two samples, once band-limited, has its middle half a sample before the first
            edge = (first - 0.5) / rate
            if enter < (last - first) / rate:
                expected.append((channel + 1, edge + enter, edge + leave, "low" if sign > 0 else "high"))
            at += length_s + 0.2  # twenty time constants: at rest again
    events, counted = found(circuit, volts, rate)
    assert len(events) == len(expected) == counted["U1"]
    expected.sort(key=lambda e: (e[0], e[1]))
    events.sort(key=lambda e: (e.channel, e.start_s))
    for event, (channel, start_s, end_s, side) in zip(events, expected, strict=True):
        assert (event.kind, event.channel, event.side) == ("rail", channel, side)
        assert event.start_s == pytest.approx(start_s, abs=0.5 / rate)
        assert event.end_s == pytest.approx(end_s, abs=0.5 / rate)


@pytest.mark.parametrize("kind", ["ideal", "real"])
def test_the_visits_found_are_those_counted_and_their_times_add_up(kind: str) -> None:
    circuit = TWO_SECTIONS
    if kind == "real":
        circuit = replace(
            circuit,
            opamps=tuple(
                replace(o, model=replace(REAL, slew_up_v_per_s=9e6, slew_down_v_per_s=9e6))
                for o in circuit.opamps
            ),
        )
    rate = 48_000
    t = np.arange(9000) / rate
    rng = np.random.default_rng(3)
    volts = np.stack(
        [8.0 * np.sin(2 * np.pi * 700 * t) * np.sin(2 * np.pi * 9 * t) ** 2, rng.normal(0, 20.0, len(t))],
        axis=1,
    )
    events, counted = found(circuit, volts, rate)
    stage = StageProcessor(circuit, sample_rate_hz=rate, channels=2, quality=Quality.STANDARD)
    padded = np.concatenate([volts, np.zeros((stage.latency_frames, 2))])
    stage.process(padded, np.empty_like(padded))
    for reading in stage.readings():
        own = [e for e in events if e.designator == reading.designator and e.kind == "rail"]
        assert len(own) == reading.clip_events == counted[reading.designator] > 100
        # a dip off the rail within one step does not end a visit
        assert sum(e.length_s for e in own) == pytest.approx(reading.clipped_s, rel=3e-5)


def test_visits_do_not_depend_on_how_the_signal_is_cut() -> None:
    volts = np.random.default_rng(5).normal(0, 10.0, (3000, 1))
    whole = found(TWO_SECTIONS, volts, 48_000)[0]
    for piece in (1, 17, 509):
        cut = found(TWO_SECTIONS, volts, 48_000, piece=piece)[0]
        assert [(e.designator, e.kind, e.side) for e in cut] == [
            (e.designator, e.kind, e.side) for e in whole
        ]
        np.testing.assert_allclose([e.start_s for e in cut], [e.start_s for e in whole], atol=0.5 / 48_000)
        np.testing.assert_allclose([e.end_s for e in cut], [e.end_s for e in whole], atol=0.5 / 48_000)


def test_a_square_wave_slews_at_each_edge_for_the_time_it_takes() -> None:
    # 8 V from rail to rail at 0.5 V/us takes 16 us: at 192 kHz some three frames, counted whole
    rate = 192_000
    circuit = net([("R1", "in", "s", 10e3), ("R2", "s", "out", 10e3)], [("gnd", "s", "out")])
    circuit = replace(circuit, opamps=tuple(replace(o, model=REAL) for o in circuit.opamps))
    t = np.arange(rate // 100) / rate
    events, _ = found(circuit, 4.0 * np.sign(np.sin(2 * np.pi * 1000 * t + 1e-3)), rate)
    slews = [e for e in events if e.kind == "slew"]
    edges = (np.arange(1, 20) * 0.5e-3 - 0.5 / rate).tolist()
    assert len(slews) >= 19
    for edge in edges:
        near = [e for e in slews if abs(e.start_s - edge) < 3 / rate]
        assert near
        assert max(e.length_s for e in near) == pytest.approx(16e-6, abs=2.5 / rate)
    assert all(min(abs(e.start_s - edge) for edge in [0.0, *edges, 0.01]) < 5 / rate for e in slews)


def follower(model: OpAmpModel, load_ohm: float = 600.0, **site: float) -> Netlist:
    """Unity gain, loaded."""
    circuit = net([("R1", "in", "a", 1.0), ("Rload", "out", "gnd", load_ohm)], [("a", "out", "out")])
    return replace(circuit, opamps=tuple(replace(o, model=model, **site) for o in circuit.opamps))


def test_the_largest_current_is_reached_when_the_load_asks_for_it() -> None:
    # 6 V peak into 600 ohm ask for 10 mA; at 7 mA it can give no more: from asin(0.7) to pi - asin(0.7) of each half
    model = replace(
        REAL, slew_up_v_per_s=1e9, slew_down_v_per_s=1e9, current_source_a=7e-3, current_sink_a=7e-3
    )
    rate, f = 96_000, 500.0
    t = np.arange(round(rate * 0.02)) / rate
    events, _ = found(follower(model), 6.0 * np.sin(2 * np.pi * f * t), rate)
    visits = [e for e in events if e.kind == "current"]
    angle = math.asin(0.7) / (2 * math.pi * f)
    expected = [k / (2 * f) + angle for k in range(20)]
    assert len(visits) == 20
    assert [e.start_s for e in visits] == pytest.approx(expected, abs=1 / rate)
    lengths = [1 / (2 * f) - 2 * angle] * 20
    assert [e.length_s for e in visits] == pytest.approx(lengths, abs=1 / rate)
    assert not [e for e in events if e.kind == "rail"]


def test_the_input_range_is_left_when_the_input_passes_its_ends() -> None:
    model = replace(REAL, slew_up_v_per_s=1e9, slew_down_v_per_s=1e9)
    rate, f = 48_000, 300.0
    t = np.arange(round(rate * 0.02)) / rate
    circuit = follower(model, 10e3, input_high_v=8.0, input_low_v=-9.0)
    events, _ = found(circuit, 10.0 * np.sin(2 * np.pi * f * t), rate)
    visits = [e for e in events if e.kind == "range"]
    over, under = math.asin(0.8) / (2 * math.pi * f), math.asin(0.9) / (2 * math.pi * f)
    expected = sorted([k / f + over for k in range(6)] + [(k + 0.5) / f + under for k in range(6)])
    assert [e.start_s for e in visits] == pytest.approx(expected, abs=1 / rate)


def test_a_signal_that_ends_at_the_rail_ends_its_visit_there() -> None:
    amplifier = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 10e3)], [("gnd", "s", "out")])
    stage = StageProcessor(amplifier, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    finder = EventFinder(stage)
    volts = np.full((1000, 1), 5.0)
    finder.process(volts, np.empty_like(volts))
    assert finder.events == []
    finder.finish()
    (event,) = finder.events
    assert event.start_s == pytest.approx(0.0, abs=1 / 48_000)
    assert event.end_s == pytest.approx((1000 - stage.filters.circuit_delay_frames) / 48_000)


def test_a_clean_signal_has_no_visits() -> None:
    events, counted = found(LOW_PASS, np.random.default_rng(1).normal(0, 0.1, 5000), 48_000)
    assert events == []
    assert counted == {"U1": 0}


@pytest.mark.parametrize("kind", ["ideal", "real"])
def test_a_log_that_is_full_takes_no_more_and_changes_nothing(kind: str) -> None:
    circuit = TWO_SECTIONS
    if kind == "real":
        circuit = replace(circuit, opamps=tuple(replace(o, model=REAL) for o in circuit.opamps))
    volts = np.random.default_rng(2).normal(0, 20.0, (2000, 2))
    outs = []
    for rows in (0, 7):
        stage = StageProcessor(circuit, sample_rate_hz=48_000, channels=2, quality=Quality.DRAFT)
        stage.core.log.begin(rows)
        out = np.empty_like(volts)
        stage.process(volts, out)
        outs.append((out, stage.readings()))
        assert rows - 2 <= len(stage.core.log.take()) <= rows
    np.testing.assert_array_equal(outs[0][0], outs[1][0])
    assert outs[0][1] == outs[1][1]
