"""Random circuits of every kind of part: whatever can be built is computed, stays finite and ends in time.

No published figure stands behind this; it looks for what nobody thought of.
"""

from __future__ import annotations

import math
import time
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.circuit.diodes import DIODE_TYPES, ROOM_DEGC, junction
from preview.circuit.netlist import GND, Charge, Netlist, OpAmpSite, Port
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor, load_kernels
from preview.errors import CircuitError
from preview.values.quality import Quality
from tests.nets import Row, net

Real = NDArray[np.float64]
MOST_PARTS, MOST_OPAMPS = 12, 4
FRAMES = 160
LONGEST_S = 20.0
"""Processor time that one circuit may take; the usual is some hundredths."""
MOST_RATIO = 50.0
"""Largest output over the larger of rails and drive: a resonance of L and C steps up, but not without end."""

VALUES = {"R": (100.0, 1e6), "C": (10e-12, 1e-6), "L": (100e-6, 1.0)}


def value(rng: np.random.Generator, kind: str) -> float:
    low, high = VALUES[kind]
    return float(np.exp(rng.uniform(math.log(low), math.log(high))))


def between(rng: np.random.Generator, low: float, high: float) -> float:
    """A number as likely in each decade."""
    return float(np.exp(rng.uniform(math.log(low), math.log(high))))


def random_model(rng: np.random.Generator) -> OpAmpModel:
    """An op-amp with about half of the limits that there are."""

    def has(share: float = 0.5) -> bool:
        return bool(rng.random() < share)

    def points() -> tuple[tuple[float, float], ...]:
        drop = rng.uniform(0.01, 1.0)
        slopes = np.sort(rng.uniform(5.0, 150.0, 2))
        at = (0.0, 5e-3, 15e-3)
        return (
            (at[0], drop),
            (at[1], drop + slopes[0] * at[1]),
            (at[2], drop + slopes[0] * at[1] + slopes[1] * (at[2] - at[1])),
        )

    high, low = (points() if has(0.4) else () for _ in range(2))
    return OpAmpModel(
        "random",
        gain_bandwidth_hz=between(rng, 0.3e6, 50e6),
        open_loop_gain=between(rng, 1e3, 1e7),
        slew_up_v_per_s=between(rng, 0.1e6, 50e6) if has(0.7) else math.inf,
        slew_down_v_per_s=between(rng, 0.1e6, 50e6) if has(0.7) else math.inf,
        output_resistance_ohm=between(rng, 1.0, 500.0) if has(0.8) else 0.0,
        swing_high_v=high[0][1] if high else rng.uniform(0.0, 2.0),
        swing_low_v=low[0][1] if low else rng.uniform(0.0, 2.0),
        swing_high_points=high,
        swing_low_points=low,
        current_source_a=between(rng, 2e-3, 60e-3) if has() else math.inf,
        current_sink_a=between(rng, 2e-3, 60e-3) if has() else math.inf,
        phase_margin_deg=rng.uniform(35.0, 85.0) if has(0.4) else 90.0,
        input_farad=between(rng, 1e-12, 20e-12) if has(0.3) else 0.0,
        input_differential_farad=between(rng, 1e-12, 20e-12) if has(0.3) else 0.0,
        input_overdrive="reverses" if has(0.3) else "clips",
        crossover_v=rng.uniform(0.3, 1.3) if has(0.15) else 0.0,
        crossover_a=rng.uniform(0.0, 100e-6),
        offset_v=rng.normal(0.0, 2e-3) if has() else 0.0,
        bias_a=rng.normal(0.0, 100e-9) if has() else 0.0,
        offset_current_a=rng.normal(0.0, 20e-9) if has() else 0.0,
    )


def random_circuit(rng: np.random.Generator) -> Netlist:
    """Stages in a row, and parts between any two nodes as far as the number of parts allows."""
    rows: list[Row] = []
    opamps: list[tuple[str, str, str]] = []
    count = int(rng.integers(1, MOST_OPAMPS + 1))

    def part(kind: str, a: str, b: str) -> None:
        rows.append((f"{kind}{len(rows) + 1}", a, b, value(rng, kind)))

    before = "in"
    for i in range(count):
        out = "out" if i == count - 1 else f"o{i}"
        s, t = f"s{i}", f"t{i}"
        form = rng.choice(["inverts", "gains", "follows", "filters"])
        if form == "inverts":
            part("R", before, s)
            part("R", s, out)
            opamps.append((GND, s, out))
        elif form == "gains":
            part("R", s, GND)
            part("R", s, out)
            opamps.append((before, s, out))
        elif form == "filters" and len(rows) + 4 + 2 * (count - 1 - i) <= MOST_PARTS:
            part("R", before, t)
            part("R", t, s)
            part("C", t, out)
            part("C", s, GND)
            opamps.append((s, out, out))
        else:
            part("R", before, s)
            part("C", s, GND)
            opamps.append((s, out, out))
        before = out
    nodes = ["in", GND, *dict.fromkeys(n for row in rows for n in row[1:3] if n not in ("in", GND)), "out"]
    ports: list[Port] = []
    for _ in range(int(rng.integers(0, MOST_PARTS - len(rows) + 1))):
        a, b = (str(n) for n in rng.choice(list(dict.fromkeys(nodes)), 2, replace=False))
        if rng.random() < 0.3 and {a, b} != {"in", GND}:
            kind = DIODE_TYPES[str(rng.choice(list(DIODE_TYPES)))]
            if rng.random() < 0.2:
                kind = replace(kind, breakdown_v=rng.uniform(2.0, 12.0))
            ports.append(Port(f"D{len(ports) + 1}", a, b, junction(kind, ROOM_DEGC)))
            continue
        if rng.random() < 0.15:  # a part through a node of its own
            rows.append((f"R{len(rows) + 1}", a, f"x{len(rows)}", value(rng, "R")))
            a = rows[-1][2]
        if {a, b} != {"in", GND}:
            part(str(rng.choice(["R", "C", "L"], p=[0.45, 0.4, 0.15])), a, b)
    rows = rows[:MOST_PARTS]
    circuit = net(rows, opamps)
    if rng.random() < 0.1 and (caps := [b for b in circuit.branches if b.designator[0] == "C"]):
        cap = caps[0]
        ports.append(Port(cap.designator, cap.a, cap.b, Charge(cap.value, rng.uniform(3.0, 30.0))))
    rail_v = rng.uniform(4.0, 18.0)
    return replace(circuit, ports=tuple(ports), opamps=tuple(_placed(rng, o, rail_v) for o in circuit.opamps))


def _placed(rng: np.random.Generator, site: OpAmpSite, rail_v: float) -> OpAmpSite:
    model = random_model(rng)
    ranged = rng.random() < 0.4
    return replace(
        site,
        type=model.type,
        model=model,
        high_v=rail_v - model.swing_high_v,
        low_v=-rail_v + model.swing_low_v,
        input_high_v=rail_v - rng.uniform(0.0, 3.0) if ranged else math.inf,
        input_low_v=-rail_v + rng.uniform(0.0, 3.0) if ranged else -math.inf,
    )


def random_drive(rng: np.random.Generator) -> Real:
    """Noise, a tone or steps of any level, shape (frames, 1)."""
    peak = between(rng, 1e-3, 60.0)
    t = np.arange(FRAMES)
    form = rng.choice(["noise", "tone", "steps"])
    if form == "noise":
        shape = rng.normal(0.0, 0.4, FRAMES)
    elif form == "tone":
        shape = np.sin(2.0 * np.pi * between(rng, 1e-3, 0.45) * t)
    else:
        shape = np.where(np.sin(2.0 * np.pi * between(rng, 1e-2, 0.2) * t + 1.0) > 0.0, 1.0, -1.0)
    return np.asarray(peak * shape)[:, None]


def cut(stage: StageProcessor, volts: Real, size: int) -> Real:
    out = np.empty_like(volts)
    for start in range(0, len(volts), size):
        stage.process(volts[start : start + size], out[start : start + size])
    return out


def try_circuit(seed: int, number: int, found: Counter[str]) -> None:
    """Run one circuit if it is stable, and count what happened, by name."""
    rng = np.random.default_rng([seed, number])
    circuit, volts = random_circuit(rng), random_drive(rng)
    assert len(circuit.branches) <= MOST_PARTS
    quality = Quality.STANDARD if rng.random() < 0.3 else Quality.DRAFT
    where = f"seed {seed}, circuit {number}"
    began = time.process_time()
    try:
        stage = StageProcessor(circuit, sample_rate_hz=48_000.0, channels=1, quality=quality)
    except CircuitError as error:
        found[f"refused: {str(error).split(':')[0][:60]}"] += 1
        return
    whole = cut(stage, volts, FRAMES)
    assert np.isfinite(whole).all(), where
    fault = stage.fault
    readings = stage.readings()
    for size in (1, 17) if fault is None else ():  # a fault silences the whole of the block it is found in
        stage.reset()
        np.testing.assert_array_equal(cut(stage, volts, size), whole, err_msg=where)
    took_s = time.process_time() - began
    assert took_s < LONGEST_S, where
    found["slowest_ms"] = max(found["slowest_ms"], round(1000 * took_s))
    found["run"] += 1
    if fault is not None:
        found[f"fault: {fault.reason}"] += 1
        found["faults"] += 1
    steps = stage.filters.factor * FRAMES
    unsolved = max((r.unsolved_steps for r in readings), default=0)
    found["with unsolved steps"] += unsolved > 0
    found["unsolved steps"] += unsolved
    found["steps"] += steps
    found["at a rail"] += any(r.clip_events for r in readings)
    found["current limited"] += any(r.current_limited_s for r in readings)
    found["out of input range"] += any(r.input_range_events for r in readings)
    found["slewing"] += any(r.slew_peak_v_per_s >= 0.999 * r.slew_limit_v_per_s for r in readings)
    found["with diodes"] += bool(circuit.ports)
    most_v = max(float(np.abs(volts).max()), *(max(o.high_v, -o.low_v) for o in circuit.opamps))
    assert np.abs(whole).max() <= MOST_RATIO * most_v, where


def try_circuits(seed: int, wanted: int) -> Counter[str]:
    """Run so many stable circuits; what happened, by name."""
    load_kernels(compile_missing=True)  # what is timed is the computation
    found: Counter[str] = Counter()
    number = 0
    while found["run"] < wanted:
        number += 1
        try_circuit(seed, number, found)
    return found


def test_sixty_random_circuits_stay_finite_and_do_not_depend_on_blocks() -> None:
    found = try_circuits(seed=1, wanted=60)
    print(dict(found))  # noqa: T201 - shown with -s: what happened
    assert found["faults"] == 0
    assert found["at a rail"] > 10
    assert found["with diodes"] > 10


@pytest.mark.parametrize(
    ("seed", "numbers"),
    [
        pytest.param(13, [419, 870, 1050], id="a class-B stage drives an inductor"),
        pytest.param(14, [499, 1455], id="a class-B stage drives a filter"),
        pytest.param(12, [2280], id="an inductor alone carries the largest current"),
        pytest.param(12, [342, 1207, 2345], id="a diode to an output at its largest current"),
        pytest.param(
            12, [1272, 2079, 2513], id="a diode or a class-B stage, and a swing that hangs on the load"
        ),
        pytest.param(14, [857, 1389], id="a diode to an output beyond its rails"),
        pytest.param(13, [1526], id="a diode and every limit"),
        pytest.param(11, [413, 2024], id="a way onto one wall that seemed to pass another"),
        pytest.param(
            11, [17, 655, 794, 1372], id="a class 2 capacitor that resonates, and an op-amp at its limits"
        ),
        pytest.param(11, [832], id="a wall that an op-amp cannot keep"),
        pytest.param(11, [304], id="a largest current into picofarads behind a hundredth of an ohm"),
        pytest.param(13, [368], id="a largest current beside a diode and a class-B stage"),
        pytest.param(11, [1265, 1550], id="a class-B stage at its largest current"),
        pytest.param(13, [484, 488], id="a class-B stage and diodes"),
    ],
)
def test_circuits_that_once_ran_away_stay_bounded_and_are_solved(seed: int, numbers: list[int]) -> None:
    load_kernels(compile_missing=True)
    found: Counter[str] = Counter()
    for number in numbers:
        try_circuit(seed, number, found)
    assert found["run"] == len(numbers)
    assert (found["faults"], found["unsolved steps"]) == (0, 0)


@pytest.mark.slow
@pytest.mark.timeout(7200)
@pytest.mark.parametrize("seed", [11, 12, 13, 14])
def test_ten_thousand_random_circuits(seed: int) -> None:
    found = try_circuits(seed=seed, wanted=2500)
    print(dict(found))  # noqa: T201 - shown with -s: what happened
    assert found["faults"] == 0
