"""Exact noise against closed forms, direct injection and general quadrature."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from preview.circuit.netlist import FixedNode, Junction, Netlist, Port
from preview.circuit.opamp import OpAmpModel
from preview.circuit.opamp_classes import ELEMENTARY_CHARGE_C
from preview.circuit.opamp_library import find_opamp
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.mna import nodal_equations, solve
from preview.network.noise import BOLTZMANN_J_PER_K, TEMPERATURE_K, OutputNoise
from preview.network.operating import operating_point
from preview.network.transfer import response
from tests.nets import ALL, LADDER, LOW_PASS, TWO_SECTIONS, net, with_models

KT4 = 4.0 * BOLTZMANN_J_PER_K * TEMPERATURE_K
FOLLOWER = net([("R1", "out", "gnd", 1e4)], [("in", "out", "out")])


@pytest.mark.parametrize("ohm", [1.0, 1e4, 1e9])
@pytest.mark.parametrize("farad", [1e-12, 1e-9])
def test_noise_of_r_and_c_is_the_root_of_kt_over_c_whatever_r(ohm: float, farad: float) -> None:
    circuit = net([("R1", "in", "out", ohm), ("C1", "out", "gnd", farad)], [])
    corner_hz = 1.0 / (2 * np.pi * ohm * farad)
    low_hz, high_hz = 1e-7 * corner_hz, 1e7 * corner_hz
    found = OutputNoise(circuit).total(low_hz, high_hz).output_vrms
    whole = math.sqrt(BOLTZMANN_J_PER_K * TEMPERATURE_K / farad)
    assert found == pytest.approx(whole, rel=2e-7)
    within = 2 / np.pi * (math.atan(1e7) - math.atan(1e-7))
    assert found == pytest.approx(whole * math.sqrt(within), rel=1e-11)


@pytest.mark.parametrize("ohm", [1e-4, 1.0, 300.0])
def test_a_resonance_however_sharp_has_kt_over_c(ohm: float) -> None:
    # equipartition: 1 mH and 100 nF at 15.9 kHz; with 100 microohm Q is a million
    circuit = net([("R1", "in", "a", ohm), ("L1", "a", "out", 1e-3), ("C1", "out", "gnd", 1e-7)], [])
    found = OutputNoise(circuit).total(1e-4, 1e11).output_vrms
    assert found == pytest.approx(math.sqrt(BOLTZMANN_J_PER_K * TEMPERATURE_K / 1e-7), rel=1e-7)


def test_a_resonance_without_loss_is_refused() -> None:
    parts = [("R1", "o", "gnd", 1e3), ("L1", "o", "out", 1e-3), ("C1", "out", "gnd", 1e-7)]
    circuit = with_models(net(parts, [("in", "o", "o")]), OpAmpModel("test", noise_v_rthz=1e-9))
    with pytest.raises(CircuitError, match="rings without loss"):
        OutputNoise(circuit).total(1.0, 1e6)


def test_voltage_and_current_noise_have_their_corners() -> None:
    model = OpAmpModel(
        "test", noise_v_rthz=5e-9, noise_corner_hz=80.0, noise_a_rthz=2e-12, noise_current_corner_hz=900.0
    )
    parts = [("R1", "in", "m", 1e3), ("R2", "m", "out", 9e3), ("R3", "p", "gnd", 2e3)]
    noise = OutputNoise(with_models(net(parts, [("p", "m", "out")]), model))
    f = np.array([1.0, 80.0, 900.0, 1e5])
    spectrum = noise.spectrum(f)
    by_name = {(s.designator, s.kind): spectrum.power_v2_per_hz[:, i] for i, s in enumerate(spectrum.sources)}
    current = (2e-12) ** 2 * (1 + 900.0 / f)
    expected = {
        ("U1", "voltage"): (10 * 5e-9) ** 2 * (1 + 80.0 / f),
        ("U1", "current +"): (10 * 2e3) ** 2 * current,
        ("U1", "current -"): (9e3) ** 2 * current,
        ("R1", "thermal"): 81 * KT4 * 1e3 + 0 * f,
        ("R2", "thermal"): KT4 * 9e3 + 0 * f,
        ("R3", "thermal"): 100 * KT4 * 2e3 + 0 * f,
    }
    assert by_name.keys() == expected.keys()
    for name, power in expected.items():
        np.testing.assert_allclose(
            by_name[name], power, rtol=1e-5, err_msg=str(name)
        )  # 10 milliohm at the output
    np.testing.assert_allclose(spectrum.output_v_rthz, np.sqrt(sum(expected.values())), rtol=1e-5)
    np.testing.assert_allclose(spectrum.input_v_rthz, spectrum.output_v_rthz / 9.0, rtol=1e-5)


def test_noise_at_the_input_has_no_bound_where_there_is_no_gain() -> None:
    circuit = net([("R1", "out", "gnd", 1e3), ("R2", "in", "gnd", 1e3)], [])
    assert OutputNoise(circuit).spectrum([1e3]).input_v_rthz[0] == math.inf


def injected_v2_per_hz(circuit: Netlist, f: float) -> float:
    """Power density at the output by driving every source by itself."""
    equations = nodal_equations(circuit)
    s = np.array([2j * np.pi * f])
    out = equations.incidence("out", "gnd")

    def power(drive: np.ndarray) -> float:
        return float(abs(solve(equations, s, drive)[0] @ out) ** 2)

    total = 0.0
    for branch in circuit.branches:
        if branch.kind is PartKind.RESISTOR:
            total += KT4 / branch.value * power(equations.incidence(branch.a, branch.b))
    for opamp in circuit.opamps:
        m = opamp.model
        row = np.zeros(len(out))
        row[equations.opamp_currents[opamp.designator]] = 1.0
        total += m.noise_v_rthz**2 * (1 + m.noise_corner_hz / f) * power(row)
        for node in (opamp.plus, opamp.minus):
            of_current = m.noise_a_rthz**2 * (1 + m.noise_current_corner_hz / f)
            total += of_current * power(equations.incidence(node, "gnd"))
    return total


@pytest.mark.parametrize("type_name", ["TL072", "OP27", "LM358"])
@pytest.mark.parametrize("name", ALL)
def test_every_source_is_carried_as_if_it_were_driven_alone(name: str, type_name: str) -> None:
    circuit = with_models(ALL[name], find_opamp(type_name))
    f = [3.0, 440.0, 15e3, 2e6]
    found = OutputNoise(circuit).spectrum(f).output_v_rthz ** 2
    np.testing.assert_allclose(found, [injected_v2_per_hz(circuit, x) for x in f], rtol=1e-8)


@pytest.mark.parametrize("name", ALL)
def test_the_total_is_that_of_a_general_quadrature(name: str) -> None:
    circuit = with_models(ALL[name], find_opamp("TL072"))
    noise = OutputNoise(circuit)

    def power(x: float) -> float:
        return math.exp(x) * float(noise.spectrum([math.exp(x)]).output_v_rthz[0]) ** 2 * 1e12

    ends = np.log(np.geomspace(20.0, 20e3, 13))
    whole = sum(quad(power, a, b, epsabs=0.0, epsrel=1e-9)[0] for a, b in pairwise(ends))
    total = noise.total()
    assert total.band_hz == (20.0, 20e3)
    assert 1e6 * total.output_vrms == pytest.approx(math.sqrt(whole), rel=1e-8)


def test_parts_of_a_band_add_up_in_power() -> None:
    noise = OutputNoise(with_models(LADDER, find_opamp("NE5532")))
    parts = [noise.total(a, b).source_vrms ** 2 for a, b in ((1.0, 700.0), (700.0, 701.0), (701.0, 1e5))]
    np.testing.assert_allclose(sum(parts), noise.total(1.0, 1e5).source_vrms ** 2, rtol=1e-9)


def test_noise_power_of_resistors_goes_with_temperature() -> None:
    cold, warm = (OutputNoise(TWO_SECTIONS, temperature_k=k).total().output_vrms for k in (150.0, 600.0))
    assert warm == pytest.approx(2.0 * cold, rel=1e-12)


def test_ideal_op_amps_are_silent() -> None:
    assert {s.kind for s in OutputNoise(LOW_PASS).spectrum([1e3]).sources} == {"thermal"}
    assert OutputNoise(FOLLOWER).total().output_vrms == 0.0


def biased(law: Junction, source_ohm: float, volts: float) -> Netlist:
    return replace(
        net([("R1", "vcc", "out", source_ohm), ("R2", "in", "gnd", 1e3)], []),
        ports=(Port("D1", "out", "gnd", law),),
        fixed=(FixedNode("V1", "vcc", volts),),
    )


def test_a_junction_without_a_voltage_has_the_thermal_noise_of_its_slope() -> None:
    # Nyquist's theorem: at rest, with an emission coefficient of 1, shot noise both ways is 4 k T / r
    slope_v = BOLTZMANN_J_PER_K * TEMPERATURE_K / ELEMENTARY_CHARGE_C
    law = Junction(saturation_a=1e-9, slope_v=slope_v, series_ohm=1e4)
    noise = OutputNoise(biased(law, 1e12, 0.0)).spectrum([1e3])
    shot, series = (
        noise.power_v2_per_hz[0, [s.kind for s in noise.sources].index(k)] for k in ("shot", "thermal")
    )
    r_d = slope_v / 1e-9
    assert noise.output_v_rthz[0] == pytest.approx(math.sqrt(KT4 * (r_d + 1e4)), rel=1e-4)  # 1 Tohm beside it
    assert shot > series


@pytest.mark.parametrize("ohm", [1e3, 1e6])
def test_a_conducting_junction_has_shot_noise(ohm: float) -> None:
    law = Junction(saturation_a=1e-15, slope_v=0.0259, series_ohm=20.0)
    circuit = biased(law, ohm, 10.0)
    current_a = operating_point(circuit).port_a["D1"]
    r_d = law.slope_v / current_a
    below = r_d + law.series_ohm
    expected = (
        2 * ELEMENTARY_CHARGE_C * current_a * (r_d * ohm / (ohm + below)) ** 2
        + KT4 * law.series_ohm * (ohm / (ohm + below)) ** 2
        + KT4 / ohm * (below * ohm / (ohm + below)) ** 2
    )
    assert OutputNoise(circuit).spectrum([1e3]).output_v_rthz[0] == pytest.approx(
        math.sqrt(expected), rel=1e-6
    )


def test_the_gain_is_the_response() -> None:
    f = [10.0, 1e3, 1e5]
    np.testing.assert_allclose(OutputNoise(LADDER).spectrum(f).gain, np.abs(response(LADDER, f)), rtol=1e-12)
