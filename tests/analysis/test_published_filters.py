"""Published component examples of filters, run through the bundled stage files.

Each row of ``tests/published/filters.toml`` names its source. A figure must come out within 0.2 % or half the last
printed digit, whichever is larger; where the parts that are printed cannot make the figure that is printed, the
disagreement is settled in ``SETTLED``, with what they do make.
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from preview.analysis.figures import evaluate
from preview.circuit.library import find_stage
from preview.circuit.netlist import Branch, Netlist, netlist
from preview.circuit.opamp import OpAmpModel
from preview.circuit.parts import OpAmp, PartKind, Stage
from preview.network.transfer import output_impedance, response

PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "filters.toml").read_text("utf-8"))
EXAMPLES = {row["id"]: row for row in PUBLISHED["example"]}
OTHERS = {row["id"]: row for kind, rows in PUBLISHED.items() if kind != "example" for row in rows}


def ideal(stage: Stage) -> Stage:
    """The stage with op-amps that have no limit but the rails."""
    for part in stage.parts:
        if isinstance(part, OpAmp):
            stage = stage.with_part(replace(part, type="ideal"))
    return stage


def circuit(name: str, values: dict[str, float], output: str = "out") -> Netlist:
    return netlist(ideal(find_stage(name)), output=output).with_values(values)


def gain(found: Netlist, frequency_hz: float) -> complex:
    return complex(response(found, [frequency_hz])[0])


@dataclass(frozen=True)
class Case:
    """An example on a stage."""

    stage: str
    parts: dict[str, str]
    """Our designator: the example's."""
    figures: dict[str, str]
    """The example's figure: ours; a ratio is read from ours in decibels."""
    output: str = "out"
    values: dict[str, float] = field(default_factory=dict)
    """What the example does not state."""


ALIKE = {"R1": "R", "R2": "R", "C1": "C", "C2": "C"}
KRC = {**ALIKE, "R3": "RA", "R4": "RB"}
BAND_PASS = {"f0_hz": "peak_hz", "bw_hz": "bandwidth_hz", "gain": "passband_gain_db"}

CASES = {
    "franco_3_4": Case(
        "inverting-low-pass",
        {"R1": "R1", "R2": "R2", "C1": "C"},
        {"f_hz": "corner_hz", "gain_db": "passband_gain_db", "phase_deg_at_0db": "phase_deg_at_9950_hz"},
    ),
    "franco_3_5": Case(
        "inverting-band-pass",
        {"R1": "R1", "R2": "R2", "C1": "C1", "C2": "C2"},
        {"f_low_hz": "low_corner_hz", "f_high_hz": "high_corner_hz", "gain_db": "passband_gain_db"},
    ),
    "franco_4_4_first_order_hp": Case(
        "inverting-high-pass",
        {"R1": "R1", "C1": "C1", "R2": "Rf"},
        {"f_hz": "corner_hz", "hf_gain_db": "passband_gain_db"},
    ),
    "franco_3_8_std_RB": Case(
        "sallen-key-low-pass-gain", KRC, {"f0_hz": "f0_hz", "q": "q", "dc_gain": "dc_gain_db"}
    ),
    "franco_3_8_exact_RB": Case(
        "sallen-key-low-pass-gain", KRC, {"f0_hz": "f0_hz", "q": "q", "dc_gain": "dc_gain_db"}
    ),
    "franco_3_10": Case(
        "sallen-key-low-pass",
        {"R1": "R1", "R2": "R2", "C1": "C1", "C2": "C2"},
        {"f0_hz": "f0_hz", "q": "q"},
    ),
    "franco_3_11": Case(
        "sallen-key-low-pass",
        {"R1": "R1", "R2": "R2", "C1": "C1", "C2": "C2"},
        {"f0_hz": "f0_hz", "q": "q", "phase_deg": "phase_deg_at_20000_hz"},
    ),
    "franco_3_13": Case(
        "sallen-key-band-pass",
        {"R1": "R", "R2": "R", "R3": "R", "C1": "C", "C2": "C", "R4": "RA", "R5": "RB"},
        BAND_PASS,
    ),
    "franco_3_14": Case(
        "twin-t-notch-gain",
        {"R1": "R1", "R2": "R1", "R3": "R2", "C1": "C1", "C2": "C1", "R4": "RA", "R5": "RB"},
        {"f0_hz": "notch_hz", "bw_hz": "bandwidth_hz", "passband_gain": "dc_gain_db"},
        values={"C3": 1e-7, "C4": 1e-7},  # together the example's C2
    ),
    "franco_3_15": Case(
        "multiple-feedback-band-pass",
        {"R1": "R1A", "R2": "R1B", "R3": "R2", "C1": "C1", "C2": "C2"},
        {"f0_hz": "f0_hz", "q": "q", "gain": "passband_gain_db"},
    ),
    "gayakwad_7_8b": Case(
        "multiple-feedback-band-pass",
        {"R1": "R1", "R2": "R2_to_gnd", "R3": "R3", "C1": "C", "C2": "C"},
        BAND_PASS,
    ),
    "coughlin_11_16": Case(
        "multiple-feedback-band-pass",
        {"R1": "R", "R2": "Rr", "R3": "feedback", "C1": "C", "C2": "C"},
        BAND_PASS,
    ),
    "franco_3_16": Case(
        "multiple-feedback-low-pass",
        {"R1": "R1", "R2": "R2", "R3": "R3", "C1": "C1", "C2": "C2"},
        {"f0_hz": "f0_hz", "q": "q", "gain": "dc_gain_db"},
    ),
    "franco_3_18": Case(
        "state-variable",
        {"R4": "R2", "R5": "R1", "C1": "C", "C2": "C"} | {f"R{n}": "R_all" for n in (1, 2, 3, 6, 7)},
        BAND_PASS,
        output="bp",
    ),
    "franco_3_19": Case(
        "two-integrator-biquad",
        {"R1": "R1", "R2": "R2", "R3": "R4", "R6": "R5", "C1": "C", "C2": "C"},
        {"f0_hz": "peak_hz", "bw_hz": "bandwidth_hz", "gain_db": "passband_gain_db"},
    ),
    "gayakwad_7_4a": Case(
        "sallen-key-low-pass-gain",
        {**ALIKE, "R3": "R1", "R4": "Rf"},
        {"f0_hz": "corner_hz", "gain": "dc_gain_db", "q": "q"},
    ),
    "coughlin_11_4": Case(
        "sallen-key-low-pass",
        {"R1": "R", "R2": "R", "C1": "C2_feedback", "C2": "C1"},
        {"f0_hz": "corner_hz", "q": "q"},
    ),
    "ti_opa4everyone_16_2": Case(
        "sallen-key-low-pass",
        {"R1": "R1", "R2": "R2", "C1": "C_fb", "C2": "C_gnd"},
        {"f0_hz": "f0_hz", "q": "q"},
    ),
}

SETTLED = {
    ("franco_3_5", "f_low_hz"): (19.954, "each corner moves the other, which the book leaves out: 0.23 %"),
    ("franco_3_8_std_RB", "q"): (4.5455, "17.8k is the standard value for 18k; 0.7 % of gain are 9 % of Q"),
    ("gayakwad_7_8b", "f0_hz"): (1247.85, "the book's rule for R2 leaves out R1, which lies in parallel"),
    ("franco_3_18", "f0_hz"): (1007.31, "15.8k is the standard value for 15.92k"),
    ("franco_3_18", "bw_hz"): (10.0731, "15.8k is the standard value for 15.92k"),
    ("franco_3_19", "gain_db"): (20.0966, "78.7k is the standard value for 79.58k"),
    ("ti_opa4everyone_16_2", "f0_hz"): (2164.74, "1.26k and 1.30k are standard values: 0.26 % high"),
}
"""What the printed parts make where it is not the printed figure, and why."""

ELSEWHERE = {
    "franco_3_7": "a tone control: curves and formulas, below",
    "franco_3_9_0db": "needs one more resistor, below",
}
# Left out: example 6.11, p. 290, the shift of a corner by 1 MHz of gain-bandwidth. What could be read of it (a
# companion text) doubles its own percentage to reach the printed 0.16 %, and does not show the circuit.


def half_last_digit(value: float) -> float:
    """Half of the last digit that is printed, 0 where it cannot be told (1000.0)."""
    digits = repr(value).partition(".")[2]
    return 0.0 if digits in ("0", "") else 0.5 * 10.0 ** -len(digits)


def run(name: str) -> dict[str, float]:
    """The figures of an example, in its own units."""
    case, row = CASES[name], EXAMPLES[name]
    parts = {ours: row["parts"][theirs] for ours, theirs in case.parts.items()} | case.values
    found = circuit(case.stage, parts, case.output)
    figures = {}
    for key, what in case.figures.items():
        value = evaluate(found, what)
        figures[key] = 10 ** (value / 20) if what.endswith("_db") and not key.endswith("_db") else value
    return figures


def test_every_example_is_run() -> None:
    assert set(EXAMPLES) == set(CASES) | set(ELSEWHERE)


@pytest.mark.parametrize("name", CASES)
def test_an_example_comes_out_as_printed_or_as_settled(name: str) -> None:
    published = EXAMPLES[name]["published"]
    for key, found in run(name).items():
        if key == "phase_deg_at_0db":
            found = abs(found)
        wanted = published[key]
        allowed = max(0.002 * abs(wanted), half_last_digit(wanted))
        if key.endswith("_db"):
            allowed = max(20 * np.log10(1.002), half_last_digit(wanted))
        if (name, key) in SETTLED:
            made, reason = SETTLED[name, key]
            assert abs(made - wanted) > allowed, f"{name} {key} needs no settling: {reason}"
            assert found == pytest.approx(made, rel=1e-4)
        else:
            assert abs(found - wanted) <= allowed, f"{name} {key}: {found} against {wanted}"


def test_output_of_franco_3_11_to_10_volts_at_20_khz() -> None:
    # p. 137: 2.425 V. The phase is printed for a cosine put 90 degrees ahead: -136.69 + 90 = -46.69 degrees; the
    # companion text prints +46.69, a slip of the sign, for a low-pass lags.
    row = EXAMPLES["franco_3_11"]
    case = CASES["franco_3_11"]
    found = circuit(case.stage, {ours: row["parts"][theirs] for ours, theirs in case.parts.items()})
    volts = 10 * gain(found, 20e3)
    assert abs(volts) == pytest.approx(row["published"]["out_v_for_10V_20kHz"], rel=2e-3)
    assert np.angle(volts, deg=True) + 90 == pytest.approx(-46.69, abs=0.1)


def test_gayakwad_7_8b_is_tuned_as_printed_by_the_resistor_that_allows_for_r1() -> None:
    row = EXAMPLES["gayakwad_7_8b"]["parts"]
    parts = {"R1": row["R1"], "R2": 1565.0, "R3": row["R3"], "C1": row["C"], "C2": row["C"]}
    found = circuit("multiple-feedback-band-pass", parts)
    assert evaluate(found, "peak_hz") == pytest.approx(1500, rel=2e-3)
    assert evaluate(found, "bandwidth_hz") == pytest.approx(333.3, rel=2e-3)


def test_divider_of_franco_3_9_brings_the_gain_to_one() -> None:
    # p. 136: R1 becomes R1A from the input and R1B to ground. 0.06 dB are missing, for 17.8k is not 18k.
    row = EXAMPLES["franco_3_9_0db"]
    parts = row["parts"]
    values = {"R1": parts["R1A"], "R2": parts["R2"], "C1": parts["C"], "C2": parts["C"]}
    found = circuit("sallen-key-low-pass-gain", values | {"R3": parts["RA"], "R4": parts["RB"]})
    divider = Branch("R1B", PartKind.RESISTOR, "a", "gnd", parts["R1B"])
    found = replace(found, branches=(*found.branches, divider))
    assert evaluate(found, "dc_gain_db") == pytest.approx(row["recomputed"]["dc_gain_db"], abs=1e-5)
    exact = replace(found, branches=tuple(b for b in found.branches if b.designator != "R4"))
    exact = replace(exact, branches=(*exact.branches, Branch("R4", PartKind.RESISTOR, "minus", "out", 18e3)))
    assert evaluate(exact, "dc_gain_db") == pytest.approx(row["published"]["dc_gain_db"], abs=0.02)
    assert evaluate(exact, "f0_hz") == pytest.approx(1000, rel=2e-3)


def test_low_pass_output_of_franco_3_19() -> None:
    row = EXAMPLES["franco_3_19"]
    case = CASES["franco_3_19"]
    parts = {ours: row["parts"][theirs] for ours, theirs in case.parts.items()}
    found = circuit(case.stage, parts, "lp")
    assert evaluate(found, "dc_gain_db") == pytest.approx(row["published"]["lp_gain_db"], abs=0.05)


def test_low_pass_notch_of_franco_3_20() -> None:
    # p. 150: the biquad with a fourth op-amp that adds input, band-pass and low-pass. No stage of the library has it;
    # here it is put behind the biquad. 15.8k is the standard value for 15.92k, so that every frequency is 0.73 % high.
    row = OTHERS["franco_3_20"]
    parts, printed = row["parts"], row["published"]
    values = {"R1": parts["R1"], "R2": parts["R1"], "R3": parts["R"], "R6": parts["R"]}
    biquad = circuit("two-integrator-biquad", values | {"C1": parts["C"], "C2": parts["C"]})
    rows = (("R12", "in"), ("R13", "out"), ("R14", "lp"), ("R15", "notch"))
    added = tuple(
        Branch(name, PartKind.RESISTOR, a, "z", parts[f"R{n}"]) for n, (name, a) in enumerate(rows, 2)
    )
    summer = replace(biquad.opamps[0], designator="U4", minus="z", out="notch")
    found = replace(
        biquad, branches=(*biquad.branches, *added), opamps=(*biquad.opamps, summer), output_node="notch"
    )
    high = parts["R"] * parts["C"] * 2 * np.pi * 1000.0  # what 1 kHz is divided by
    assert evaluate(found, "f0_hz") == pytest.approx(printed["f0_hz"] / high, rel=2e-3)
    assert evaluate(found, "q") == pytest.approx(printed["q"], rel=2e-3)
    assert 20 * np.log10(abs(gain(found, 1e6))) == pytest.approx(printed["hf_gain_db"], abs=0.05)
    assert abs(gain(found, printed["fz_hz"] / high)) < 0.01 * abs(gain(found, 1e6))


FIRST_ORDER = {"R1": 15.9e3, "C1": 10e-9, "R2": 10e3, "R3": 10e3}
SECOND_ORDER = {"R1": 33.86e3, "R2": 33.86e3, "C1": 4.7e-9, "C2": 4.7e-9, "R3": 27e3, "R4": 15.82e3}


@pytest.mark.parametrize(
    ("name", "stage", "parts"),
    [
        ("gayakwad_7_3", "rc-low-pass-gain", FIRST_ORDER),
        ("gayakwad_7_5b", "rc-high-pass-gain", FIRST_ORDER | {"R1": 15.92e3}),
        ("gayakwad_7_4b", "sallen-key-low-pass-gain", SECOND_ORDER),
        # The table of 7.6 holds for 1 kHz, that is for 33.86k: the book's standard 33k make 1026 Hz.
        ("gayakwad_7_6b", "sallen-key-high-pass-gain", SECOND_ORDER),
    ],
)
def test_a_printed_table_of_gains_comes_out(name: str, stage: str, parts: dict[str, float]) -> None:
    row = OTHERS[name]
    found = circuit(stage, parts)
    for frequency_hz, wanted in zip(row["frequency_hz"], row["published_gain"], strict=True):
        allowed = max(0.002 * wanted, half_last_digit(wanted))
        assert abs(abs(gain(found, frequency_hz)) - wanted) <= allowed, frequency_hz


def test_all_pass_of_gayakwad_7_11() -> None:
    row = OTHERS["gayakwad_7_11"]
    found = circuit("all-pass", {"R3": row["R"], "C1": row["C"]})
    at = gain(found, row["frequency_hz"])
    assert np.angle(at, deg=True) == pytest.approx(row["published_phase_deg"], abs=0.18)  # 0.2 %
    assert abs(at) == pytest.approx(1, abs=1e-12)


def test_four_volts_summed_by_tomar_5_1() -> None:
    row = OTHERS["tomar_5_1"]
    values = {f"R{n}": ohm for n, ohm in enumerate(row["R"], 1)} | {"R5": row["Rf"]}
    volts = 0.0
    for n, input_v in enumerate(row["V"], 1):  # one input at a time, the others silent: superposition
        found = circuit("summing", values)
        moved = tuple(
            replace(b, a="in" if b.designator == f"R{n}" else "gnd") if b.b == "sum" and b.a == "in" else b
            for b in (
                replace(b, a="in", b="sum") if b.designator in ("R1", "R2", "R3", "R4") else b
                for b in found.branches
            )
        )
        volts += input_v * gain(replace(found, branches=moved), 100.0).real
    assert volts == pytest.approx(row["published_vout"], abs=0.005)


FRANCO_3_7 = {
    "R1": 11e3, "R2": 11e3, "R3": 11e3, "R4": 3.6e3, "R5": 3.6e3, "C1": 51e-9, "C2": 51e-9, "C3": 5.1e-9,
}  # fmt: skip


def test_tone_control_of_franco_3_7_and_the_formulas_of_its_handbook() -> None:
    # The book designs for 20 dB, 30 Hz and 10 kHz. Its own formulas give 31.2 Hz, 8.67 kHz and 20.08 dB for the
    # standard values; the treble comes to 19.6 dB, for its formula takes the 500k track as open.
    row, formulas = EXAMPLES["franco_3_7"], OTHERS["nsc_lm833_bass_treble"]["formulae"]
    flat = circuit("tone-control", FRANCO_3_7)
    assert abs(gain(flat, 1000.0)) == pytest.approx(1, abs=1e-9)
    bass, treble = flat.with_values({"P1": 1.0}), flat.with_values({"P2": 1.0})
    assert evaluate(bass, "dc_gain_db") == pytest.approx(row["recomputed"]["bass_max_db"], abs=0.01)
    assert abs(gain(treble, 1e6)) == pytest.approx(10 ** (row["recomputed"]["treble_max_db"] / 20), rel=0.02)
    for name, found in (("bass", bass), ("treble", treble)):
        for frequency_hz, wanted in zip(row["frequency_hz"], row[f"{name}_full_boost_db"], strict=True):
            db = 20 * np.log10(abs(gain(found, frequency_hz)))
            assert db == pytest.approx(wanted, abs=0.12)  # 10 and 50 ohm of track stay at the end of a turn
    published = {"pi": np.pi, "R1": 11e3, "R2": 100e3, "R3": 3.6e3, "R5": 11e3, "C1": 51e-9, "C3": 5.1e-9}
    worth = {key: eval(text, {}, published) for key, text in formulas.items()}
    assert worth["fL"] == pytest.approx(row["recomputed"]["fB_hz"], rel=1e-6)
    assert worth["fH"] == pytest.approx(row["recomputed"]["fT_hz"], rel=1e-6)


def test_bass_control_with_47_nanofarads_reaches_20_db() -> None:
    row = OTHERS["nsc_11k_100k_47n"]
    found = circuit("tone-control", {"P1": 1.0})
    assert find_stage("tone-control").part("C1").value == row["C1"]
    assert evaluate(found, "dc_gain_db") == pytest.approx(row["published"]["max_gain_db"], abs=0.1)


def test_sensitivities_of_q_of_franco_3_21() -> None:
    # p. 151, equal-component KRC with Q 5: relative change of Q over relative change of a part.
    row = OTHERS["franco_3_21"]
    parts = {"R1": 15.9155e3, "R2": 15.9155e3, "C1": 10e-9, "C2": 10e-9, "R3": 10e3, "R4": 18e3}
    small = 1e-4

    def of(name: str) -> float:
        q = [
            evaluate(circuit("sallen-key-low-pass-gain", parts | {name: parts[name] * (1 + d)}), "q")
            for d in (small, -small)
        ]
        return float(np.log(q[0] / q[1]) / (2 * small))

    assert abs(of("R1")) == pytest.approx(row["S_Q_R"], rel=2e-3)
    assert abs(of("C1")) == pytest.approx(row["S_Q_C"], rel=2e-3)
    assert of("R3") == pytest.approx(row["S_Q_RA"], rel=2e-3)
    k = 2.8
    assert of("R4") * k / (k - 1) == pytest.approx(row["S_Q_K"], rel=2e-3)


def test_band_pass_of_fiore_11_5() -> None:
    # p. 419: 800 to 1200 Hz; f0 is their geometric mean, the gain -2 Q^2 where there is no R2.
    row = OTHERS["fiore_11_5"]["published"]
    c, q = 10e-9, 979.796 / 400
    parts = {"R1": 1 / (2 * np.pi * 979.796 * c * 2 * q), "R2": 1e9, "C1": c, "C2": c}
    found = circuit("multiple-feedback-band-pass", parts | {"R3": parts["R1"] * 4 * q * q})
    assert evaluate(found, "peak_hz") == pytest.approx(row["f0_hz"], abs=0.5)
    assert evaluate(found, "q") == pytest.approx(row["q"], abs=0.005)
    assert gain(found, 979.796).real == pytest.approx(row["gain"], rel=2e-3)


def test_gain_bandwidth_that_franco_6_9_asks_for_holds_q_within_one_percent() -> None:
    # p. 287: a biquad of 10 kHz and Q 25 wants 4 Q f0 / error = 100 MHz for an error of Q of 1 %.
    row = OTHERS["franco_6_9"]
    r = 1 / (2 * np.pi * row["f0_hz"] * 1e-9)
    parts = {"R1": 25 * r, "R2": 25 * r, "R3": r, "R6": r, "C1": 1e-9, "C2": 1e-9}
    found = circuit("two-integrator-biquad", parts)
    real = _with_gain_bandwidth(found, row["published_gbw_hz"])
    q = evaluate(real, "peak_hz") / evaluate(real, "bandwidth_hz")
    assert q / row["q"] - 1 == pytest.approx(0.01, rel=0.05)


def _with_gain_bandwidth(found: Netlist, gain_bandwidth_hz: float) -> Netlist:
    figures: dict[str, Any] = {"gain_bandwidth_hz": gain_bandwidth_hz, "open_loop_gain": 1e9}
    model = replace(found.opamps[0].model, type="trial", **figures)
    assert isinstance(model, OpAmpModel)
    return replace(found, opamps=tuple(replace(o, type="trial", model=model) for o in found.opamps))


def test_corner_of_a_gain_of_ten_with_1_mhz_of_gain_bandwidth_fiore_5_1() -> None:
    row = OTHERS["fiore_5_1"]
    found = circuit("inverting-gain", {"R1": 10e3, "R2": 10e3 * (row["noise_gain"] - 1)})
    real = _with_gain_bandwidth(found, row["gbw_hz"])
    assert evaluate(real, "corner_hz") == pytest.approx(row["published_hz"], rel=2e-3)


def test_output_impedance_of_franco_6_5_is_10_milliohm_and_159_microhenry() -> None:
    # p. 272: gain 10 with an open-loop gain of 100 V/mV, 1 MHz and 100 ohm; up to 10 Hz it is the printed resistance,
    # between the breaks the printed inductance, a decade above the second one the 100 ohm (all within the asymptotes).
    row = OTHERS["franco_6_5"]
    found = circuit("inverting-gain", {"R1": row["R1"], "R2": row["R2"]})
    figures = {
        "gain_bandwidth_hz": row["ft_hz"],
        "open_loop_gain": row["a0"],
        "output_resistance_ohm": row["ro_ohm"],
    }
    model = replace(found.opamps[0].model, type="trial", **figures)
    found = replace(found, opamps=(replace(found.opamps[0], type="trial", model=model),))
    low, between, high = np.abs(output_impedance(found, [0.1, 1e3, 1e7]))
    assert low == pytest.approx(row["published_low_freq_ohm"], rel=2e-3)
    assert between / (2 * np.pi * 1e3) == pytest.approx(row["published_inductance_h"], rel=5e-3)
    assert high == pytest.approx(row["ro_ohm"], rel=1e-2)
