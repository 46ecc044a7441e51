"""Where circuits come to rest, against closed forms, bracketed roots and the balance of currents."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import lambertw

from preview.circuit.netlist import GND, Branch, Charge, FixedNode, Junction, Netlist, OpAmpSite, Port
from preview.circuit.opamp import IDEAL, PERFECT, OpAmpModel
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.junctions import bias
from preview.network.operating import operating_point, small_signal
from preview.network.transfer import group_delay, input_impedance, output_impedance, response
from tests.nets import LADDER, LOW_PASS, net, with_models

SIGNAL = Junction(saturation_a=2.52e-9, slope_v=1.752 * 0.025852, series_ohm=0.568)
ZENER = Junction(saturation_a=1e-14, slope_v=0.026, series_ohm=4.0, breakdown_v=5.1)
RED_LED = Junction(saturation_a=1e-18, slope_v=0.05, series_ohm=2.0)
INVERTER = net([("R1", "in", "m", 10e3), ("R2", "m", "out", 100e3)], [("gnd", "m", "out")])


def with_diodes(circuit: Netlist, *ports: tuple[str, str, Junction], vcc: float | None = None) -> Netlist:
    """Diodes by (anode, cathode, law), D1 first; a fixed node vcc where it has a voltage."""
    return replace(
        circuit,
        ports=tuple(Port(f"D{i + 1}", a, b, law) for i, (a, b, law) in enumerate(ports)),
        fixed=() if vcc is None else (FixedNode("V1", "vcc", vcc),),
    )


def series(ohm: float, law: Junction) -> Netlist:
    return with_diodes(net([("R1", "in", "out", ohm)], []), ("out", "gnd", law))


@pytest.mark.parametrize("ohm", [1.0, 1e3, 1e7])
@pytest.mark.parametrize("volts", [-30.0, -0.3, 0.0, 0.2, 0.7, 5.0, 400.0])
def test_resistor_and_diode_equal_the_lambert_w_solution(ohm: float, volts: float) -> None:
    point = operating_point(series(ohm, SIGNAL), volts)
    r, vt, i_s = ohm + SIGNAL.series_ohm, SIGNAL.slope_v, SIGNAL.saturation_a
    x = (volts + i_s * r) / vt + math.log(i_s * r / vt)
    w = lambertw(math.exp(x)).real if x < 500.0 else brentq(lambda y: y + math.log(y) - x, 1.0, x)
    assert point.port_a["D1"] == pytest.approx(vt / r * w - i_s, rel=1e-9, abs=1e-9 * i_s)
    assert point.volts["out"] == pytest.approx(volts - ohm * (vt / r * w - i_s), rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("volts", [-200.0, -12.0, -5.2, -4.0, 3.0])
def test_zener_behind_a_resistor_equals_the_bracketed_root(volts: float) -> None:
    point = operating_point(series(470.0, ZENER), volts)
    out_v = brentq(
        lambda v: (volts - v) / 470.0 - bias(ZENER, v).current_a, min(volts, 0), max(volts, 0), xtol=1e-15
    )
    assert point.volts["out"] == pytest.approx(out_v, abs=1e-12)
    if volts < -10.0:
        assert -7.0 < point.volts["out"] < -5.0


def test_led_current_from_a_fixed_supply() -> None:
    circuit = with_diodes(
        net([("R1", "vcc", "a", 330.0), ("R2", "in", "out", 1e3), ("R3", "out", "gnd", 1e3)], []),
        ("a", "gnd", RED_LED),
        vcc=5.0,
    )
    point = operating_point(circuit)
    r, vt, i_s = 332.0, RED_LED.slope_v, RED_LED.saturation_a
    expected = vt / r * lambertw(i_s * r / vt * math.exp((5.0 + i_s * r) / vt)).real - i_s
    assert point.port_a["D1"] == pytest.approx(expected, rel=1e-9)
    assert point.volts["vcc"] == 5.0
    assert point.volts["out"] == 0.0


@pytest.mark.parametrize("volts", [-24.0, -1.0, 0.0, 3.0, 24.0])
def test_bridge_of_four_diodes(volts: float) -> None:
    load_ohm = 1e3
    circuit = with_diodes(
        net([("R1", "p", "m", load_ohm), ("R2", "in", "out", 1e3), ("R3", "out", "gnd", 1e3)], []),
        ("in", "p", SIGNAL),
        ("gnd", "p", SIGNAL),
        ("m", "in", SIGNAL),
        ("m", "gnd", SIGNAL),
    )
    point = operating_point(circuit, volts)

    # by symmetry the two of a pair carry the same: load current i less the leak of the pair that is off
    def off(drop: float) -> float:
        on = bias(SIGNAL, drop).current_a
        leak = bias(SIGNAL, drop - abs(volts)).current_a
        return (abs(volts) - 2.0 * drop) / load_ohm - on - leak

    drop = brentq(off, -1.0, abs(volts) + 1.0, xtol=1e-15)
    assert point.volts["p"] - point.volts["m"] == pytest.approx(abs(volts) - 2.0 * drop, abs=1e-9)
    assert point.port_a["D1"] == pytest.approx(point.port_a["D4"], rel=1e-9, abs=1e-15)


def test_bias_divider_on_a_single_supply() -> None:
    model = OpAmpModel("test", bias_a=-45e-9, gain_bandwidth_hz=1e6, open_loop_gain=1e5)
    site = OpAmpSite("U1", "p", "out", "out", "test", 7.5, 0.02, model)
    parts = [("C1", "in", "p", 1e-6), ("R1", "vcc", "p", 100e3), ("R2", "p", "gnd", 100e3)]
    circuit = replace(net(parts, []), opamps=(site,), fixed=(FixedNode("V1", "vcc", 9.0),))
    point = operating_point(circuit)
    assert point.volts["p"] == pytest.approx(
        4.5 + 45e-9 * 50e3, abs=1e-12
    )  # the current flows out of the input
    assert point.volts["out"] == pytest.approx(point.volts["p"] / (1 + 1e-5), abs=1e-9)
    assert point.limiting == {}


def test_divider_and_inverter_with_a_steady_input() -> None:
    parts = [
        ("R1", "in", "sum", 1e3),
        ("R2", "sum", "o", 2e3),
        ("R3", "o", "out", 1e3),
        ("R4", "out", "gnd", 3e3),
    ]
    point = operating_point(net(parts, [("gnd", "sum", "o")]), 1.0)
    assert point.volts == pytest.approx({"in": 1.0, "sum": 0.0, "o": -2.0, "out": -1.5, GND: 0.0}, abs=1e-9)
    assert point.opamp_a["U1"] == pytest.approx(-1e-3 - 0.5e-3)


def test_offset_is_raised_by_the_noise_gain_and_the_open_loop_gain_is_finite() -> None:
    model = OpAmpModel("test", offset_v=3e-3, open_loop_gain=1e3)
    point = operating_point(with_models(INVERTER, model))
    assert point.volts["out"] == pytest.approx(
        11 * 3e-3 / (1 + 11 / 1e3), rel=1e-6
    )  # 10 milliohm in 110 kohm


@pytest.mark.parametrize(("volts", "out_v", "bound"), [(2.0, -13.5, "low"), (-9.0, 13.5, "high")])
def test_an_output_rests_at_its_limit(volts: float, out_v: float, bound: str) -> None:
    point = operating_point(INVERTER, volts)
    assert point.volts["out"] == pytest.approx(out_v)
    assert point.limiting == {"U1": bound}
    # the summing node has left gnd
    assert point.volts["m"] == pytest.approx((volts * 100e3 + out_v * 10e3) / 110e3)


@pytest.mark.parametrize(("volts", "bound", "out_v"), [(-1.0, "source", 2.0), (1.0, "sink", -3.0)])
def test_an_output_rests_at_its_current_limit(volts: float, bound: str, out_v: float) -> None:
    model = OpAmpModel("test", current_source_a=0.02, current_sink_a=0.03)
    circuit = replace(
        INVERTER, branches=(*INVERTER.branches, Branch("R3", PartKind.RESISTOR, "out", "gnd", 100.0))
    )
    point = operating_point(with_models(circuit, model), volts)
    assert point.limiting == {"U1": bound}
    assert point.opamp_a["U1"] == pytest.approx(0.02 if bound == "source" else -0.03)
    assert point.volts["out"] == pytest.approx(out_v, rel=2e-3)  # 110 kohm beside 100 ohm


@pytest.mark.parametrize(("load_ohm", "swing_v"), [(1e6, 14.0), (14e3, 14.0), (2e3, 12.0), (600.0, 8.64)])
def test_the_swing_shrinks_with_the_load_between_the_points_of_the_data_sheet(
    load_ohm: float, swing_v: float
) -> None:
    # rails of 15 V; 1 V from them at 1 mA and below, 3 V at 6 mA: on that line 0.6 V + 400 ohm, which goes on beyond
    points = ((1e-3, 1.0), (6e-3, 3.0))
    model = OpAmpModel(
        "test", swing_high_v=1.0, swing_low_v=1.0, swing_high_points=points, swing_low_points=points
    )
    parts = [("R1", "in", "m", 10e6), ("R2", "m", "out", 100e6), ("R3", "out", "gnd", load_ohm)]
    circuit = with_models(net(parts, [("gnd", "m", "out")], rail_v=14.0), model)
    for volts, bound in ((-5.0, "high"), (5.0, "low")):
        point = operating_point(circuit, volts)
        assert point.limiting == {"U1": bound}
        assert abs(point.volts["out"]) == pytest.approx(
            swing_v, rel=2e-5
        )  # 110 Mohm of feedback beside the load


def test_two_op_amps_limit_at_once_and_a_third_does_not() -> None:
    parts = [
        ("R1", "in", "m1", 1e3), ("R2", "m1", "o1", 100e3),
        ("R3", "o1", "m2", 1e3), ("R4", "m2", "o2", 100e3),
        ("R5", "o2", "m3", 100e3), ("R6", "m3", "out", 1e3),
    ]  # fmt: skip
    point = operating_point(net(parts, [("gnd", "m1", "o1"), ("gnd", "m2", "o2"), ("gnd", "m3", "out")]), 1.0)
    assert point.limiting == {"U1": "low", "U2": "high"}
    assert point.volts["out"] == pytest.approx(-0.135)


def test_an_integrator_rests_where_it_began_or_runs_to_a_limit() -> None:
    circuit = net([("R1", "in", "m", 10e3), ("C1", "m", "out", 1e-9)], [("gnd", "m", "out")])
    assert operating_point(circuit).volts["out"] == 0.0
    drifting = with_models(circuit, OpAmpModel("test", bias_a=1e-9))
    assert operating_point(drifting).limiting == {"U1": "high"}
    drifting = with_models(circuit, OpAmpModel("test", offset_v=-1e-6))
    assert operating_point(drifting).limiting == {"U1": "low"}


@pytest.mark.parametrize("law", [SIGNAL, RED_LED], ids=["signal", "led"])
@pytest.mark.parametrize("volts", [1e-6, 0.01, 1.0, 100.0])
def test_a_diode_in_the_feedback_takes_the_logarithm(law: Junction, volts: float) -> None:
    circuit = with_diodes(net([("R1", "in", "m", 10e3)], [("gnd", "m", "out")]), ("m", "out", law))
    current_a = volts / 10e3
    drop_v = law.slope_v * math.log1p(current_a / law.saturation_a) + law.series_ohm * current_a
    assert operating_point(circuit, volts).volts["out"] == pytest.approx(-drop_v, rel=1e-9)


@pytest.mark.parametrize("model", [IDEAL, OpAmpModel("test", open_loop_gain=1e5, offset_v=1e-3)])
@pytest.mark.parametrize("volts", [-5.0, -1e-3, 0.0, 1e-3, 5.0])
def test_precision_rectifier(model: OpAmpModel, volts: float) -> None:
    circuit = net([("R1", "out", "gnd", 10e3), ("R2", "in", "p", 1e3)], [("p", "out", "o")])
    point = operating_point(with_diodes(with_models(circuit, model), ("o", "out", SIGNAL)), volts)
    wanted_v = volts + model.offset_v
    if wanted_v > -SIGNAL.saturation_a * 10e3:
        assert point.volts["out"] == pytest.approx(wanted_v, abs=2e-4)
        assert point.limiting == {}
    else:  # the loop is open: only the leak of the diode flows in the load
        assert point.limiting == {"U1": "low"}
        assert point.volts["out"] == pytest.approx(-SIGNAL.saturation_a * 10e3, rel=1e-6)


def test_two_diodes_in_series_that_both_block_share_what_little_flows() -> None:
    other = replace(SIGNAL, saturation_a=1e-12)
    circuit = with_diodes(
        net([("R1", "in", "out", 1e3), ("R2", "out", "gnd", 1e9)], []),
        ("x", "out", SIGNAL),
        ("gnd", "x", other),
    )
    point = operating_point(circuit, 10.0)
    assert point.port_a["D1"] == pytest.approx(point.port_a["D2"], rel=1e-9)
    assert point.port_a["D2"] == pytest.approx(-1e-12, rel=1e-9)


def test_what_cannot_rest_is_refused_in_bounded_time() -> None:
    ramp = net([("R1", "in", "m", 10e3), ("C1", "m", "out", 1e-9)], [("gnd", "m", "out")], rail_v=math.inf)
    with pytest.raises(CircuitError, match="does not come to rest"):
        operating_point(with_models(ramp, PERFECT), 1.0)


def test_a_node_behind_capacitors_alone_is_refused() -> None:
    circuit = net([("R1", "in", "out", 1e3), ("C1", "out", "x", 1e-9), ("C2", "x", "gnd", 1e-9)], [])
    with pytest.raises(CircuitError, match="singular"):
        operating_point(circuit)


def random_circuit(rng: np.random.Generator) -> Netlist:
    """A chain of nodes with resistors, diodes of any kind across it and op-amps with feedback along it."""
    nodes = ["in", *(f"n{i}" for i in range(int(rng.integers(2, 6)))), "out"]
    branches, sites, ports = [], [], []

    def resistor(a: str, b: str) -> None:
        branches.append(Branch(f"R{len(branches)}", PartKind.RESISTOR, a, b, 10.0 ** rng.uniform(1, 6)))

    for a, b in pairwise(nodes):
        if rng.random() < 0.35:  # an amplifier from a to b
            name = f"U{len(sites) + 1}"
            real = OpAmpModel(
                "test",
                open_loop_gain=10.0 ** rng.uniform(3, 6),
                gain_bandwidth_hz=1e6,
                output_resistance_ohm=10.0 ** rng.uniform(0, 3),
                offset_v=rng.normal(0, 3e-3),
                bias_a=rng.normal(0, 1e-7),
                offset_current_a=rng.normal(0, 1e-8),
                current_source_a=rng.uniform(0.005, 0.05),
                current_sink_a=rng.uniform(0.005, 0.05),
            )
            model = real if rng.random() < 0.7 else IDEAL
            minus = f"m{len(sites)}"
            resistor(minus, b)
            inverts = rng.random() < 0.5
            resistor(a if inverts else GND, minus)
            if rng.random() < 0.4:
                ends = [(minus, b), (b, minus)][: int(rng.integers(1, 3))]
                ports += [Port(f"D{len(ports) + i}", x, y, SIGNAL) for i, (x, y) in enumerate(ends)]
            sites.append(OpAmpSite(name, GND if inverts else a, minus, b, "test", 13.0, -12.0, model))
        else:
            resistor(a, b)
            resistor(b, GND)
    for _ in range(int(rng.integers(0, 5))):
        a, b = rng.choice([*nodes, GND, "vcc"], 2, replace=False)
        law = [SIGNAL, ZENER, RED_LED][int(rng.integers(3))]
        ports.append(Port(f"D{len(ports)}", str(a), str(b), law))
    resistor("vcc", nodes[1])
    return Netlist(
        "in",
        "out",
        tuple(branches),
        tuple(sites),
        tuple(ports),
        (FixedNode("V1", "vcc", rng.uniform(-15, 15)),),
    )


def test_random_circuits_come_to_rest_with_their_currents_in_balance() -> None:
    rng = np.random.default_rng(7)
    limited = 0
    for _ in range(300):
        circuit = random_circuit(rng)
        point = operating_point(circuit, rng.uniform(-10.0, 10.0))
        volts = point.volts
        sums = dict.fromkeys(volts, 0.0)
        sizes = dict.fromkeys(volts, 1e-12)

        def flow(a: str, b: str, current_a: float, sums=sums, sizes=sizes) -> None:
            sums[a] += current_a
            sums[b] -= current_a
            sizes[a] += abs(current_a)
            sizes[b] += abs(current_a)

        for branch in circuit.branches:
            flow(branch.a, branch.b, (volts[branch.a] - volts[branch.b]) / branch.value)
        for port in circuit.ports:
            current_a = bias(port.law, volts[port.a] - volts[port.b]).current_a
            assert point.port_a[port.designator] == pytest.approx(current_a, rel=1e-6, abs=1e-12)
            flow(port.a, port.b, current_a)
        for site in circuit.opamps:
            model = site.model
            flow(site.plus, GND, model.bias_a + model.offset_current_a / 2)
            flow(site.minus, GND, model.bias_a - model.offset_current_a / 2)
            out_a = point.opamp_a[site.designator]
            flow(GND, site.out, out_a)
            inner_v = volts[site.out] + out_a * (
                max(model.output_resistance_ohm, 0.01) if model.real else 0.0
            )
            wants = volts[site.plus] - volts[site.minus] + model.offset_v - inner_v / model.open_loop_gain
            bound = point.limiting.get(site.designator)
            assert site.low_v - 1e-6 <= inner_v <= site.high_v + 1e-6
            assert -model.current_sink_a - 1e-9 <= out_a <= model.current_source_a + 1e-9
            if bound is None:
                assert wants == pytest.approx(0.0, abs=1e-9)
            else:
                limited += 1
                assert wants * (1.0 if bound in ("high", "source") else -1.0) > -1e-9
        for node in volts:
            if node not in ("in", "vcc", GND):
                assert sums[node] == pytest.approx(0.0, abs=1e-7 * sizes[node] + 1e-13), node
    assert limited > 50


# -- the circuit around it


def test_a_diode_is_a_resistance_to_a_small_signal() -> None:
    circuit = with_diodes(
        net([("R1", "vcc", "out", 10e3), ("R2", "in", "x", 1e3), ("C1", "x", "out", 1.0)], []),
        ("out", "gnd", SIGNAL),
        vcc=12.0,
    )
    current_a = operating_point(circuit).port_a["D1"]
    r_d = SIGNAL.series_ohm + SIGNAL.slope_v / (current_a + SIGNAL.saturation_a)
    parallel = 1.0 / (1.0 / r_d + 1.0 / 10e3)
    assert response(circuit, [1e3])[0] == pytest.approx(parallel / (1e3 + parallel), rel=1e-6)
    assert output_impedance(circuit, [1e3])[0] == pytest.approx(1.0 / (1.0 / parallel + 1e-3), rel=1e-6)
    assert input_impedance(circuit, [1e3])[0] == pytest.approx(1e3 + parallel, rel=1e-6)


def test_a_load_is_part_of_where_the_circuit_rests_though_not_of_its_output_impedance() -> None:
    parts = [("R1", "vcc", "out", 1e3), ("R2", "in", "gnd", 1e3), ("Rload", "out", "gnd", 1e3)]
    circuit = with_diodes(net(parts, []), ("out", "gnd", RED_LED), vcc=5.0)
    current_a = operating_point(circuit).port_a["D1"]
    r_d = RED_LED.series_ohm + RED_LED.slope_v / (current_a + RED_LED.saturation_a)
    assert output_impedance(circuit, [1e3])[0] == pytest.approx(1.0 / (1.0 / r_d + 1e-3), rel=1e-9)


def test_a_class_2_capacitor_has_half_its_capacitance_at_its_half_voltage() -> None:
    circuit = replace(
        net([("R1", "in", "out", 10e3), ("R2", "vcc", "out", 10e3), ("C1", "out", "gnd", 100e-9)], []),
        ports=(Port("C1", "out", "gnd", Charge(100e-9, 25.0)),),
        fixed=(FixedNode("V1", "vcc", 50.0),),
    )
    f = np.array([10.0, 300.0, 1e4])
    expected = 0.5 / (1.0 + 2j * np.pi * f * 5e3 * 50e-9)
    np.testing.assert_allclose(response(circuit, f), expected, rtol=1e-9)
    np.testing.assert_allclose(
        group_delay(circuit, f), 5e3 * 50e-9 / (1 + (2 * np.pi * f * 5e3 * 50e-9) ** 2), rtol=1e-9
    )
    unbiased = replace(circuit, fixed=(FixedNode("V1", "vcc", 0.0),))
    np.testing.assert_allclose(response(unbiased, f), 0.5 / (1.0 + 2j * np.pi * f * 5e3 * 100e-9), rtol=1e-9)


def test_a_linear_circuit_is_its_own_small_signal_circuit() -> None:
    assert small_signal(LOW_PASS) is LOW_PASS
    assert small_signal(LADDER) is LADDER


def test_fixed_nodes_are_gnd_to_a_small_signal_and_parts_between_them_are_gone() -> None:
    parts = [
        ("R1", "in", "m", 10e3),
        ("R2", "m", "out", 10e3),
        ("R3", "vcc", "gnd", 1e3),
        ("R4", "vcc", "x", 1e3),
    ]
    circuit = with_diodes(net(parts, [("vcc", "m", "out")]), ("x", "gnd", RED_LED), vcc=5.0)
    seen = small_signal(circuit)
    assert [b.designator for b in seen.branches] == ["R1", "R2", "R4", "D1"]
    assert seen.opamps[0].plus == GND
    assert (seen.ports, seen.fixed) == ((), ())
    assert operating_point(circuit).volts["out"] == pytest.approx(10.0)
    assert response(circuit, [1e3])[0] == pytest.approx(-1.0)
