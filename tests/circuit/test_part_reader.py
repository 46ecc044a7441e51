"""Reading potentiometers, switches, diodes, fixed voltages and further outputs from stage files."""

from __future__ import annotations

import math

import pytest

from preview.circuit.diodes import DIODE_TYPES
from preview.circuit.netlist import netlist
from preview.circuit.parts import Diode, FixedVoltage, Potentiometer, Stage, Switch, TwoTerminal
from preview.circuit.reader import parse_stage
from preview.errors import CircuitError, PartValueError, PreviewError

GOOD = """\
title = "Test stage"
supply = { positive = "9 V", negative = "0 V" }
temperature = "40 degC"
outputs = ["w", "c"]

[parts]
R1 = { kind = "resistor", nodes = ["in", "out"], value = "4k7", adjust = true }
R2 = { kind = "resistor", nodes = ["supply+", "bias"], value = "100k" }
P1 = { kind = "potentiometer", ends = ["gnd", "out"], wiper = "w", value = "10k", taper = "log", position = "70 %" }
P2 = { kind = "potentiometer", ends = ["w", "c"], wiper = "c", value = 5000, adjust = false }
C1 = { kind = "capacitor", nodes = ["c", "gnd"], value = "1u", dielectric = "X7R", half_voltage = "25 V" }
S1 = { kind = "switch", nodes = ["c", "gnd"], closed = false, role = "mutes" }
D1 = { kind = "diode", anode = "out", cathode = "bias", type = "signal" }
D2 = { kind = "diode", anode = "gnd", cathode = "out", type = "zener", breakdown = "5.1 V", temperature = "-10 °C" }
D3 = { kind = "diode", anode = "supply-", cathode = "out", type = "red-led", saturation = "1e-18 A", emission = 1.9 }
V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V", role = "half the supply" }

[[expect]]
what = "gain_db_at_1000_hz"
value = -3
within = "1 dB"
source = "closed form"
output = "c"
parts = { P1 = "25 %", P2 = 0.5, S1 = true, R1 = "1k" }
"""


def read(text: str) -> Stage:
    return parse_stage(text, name="x", file="stages/x.toml")


def test_every_kind_is_read_as_it_is_written() -> None:
    stage = read(GOOD)
    assert stage.part("P1") == Potentiometer("P1", ("gnd", "out"), "w", 10e3, "log", 0.7)
    assert stage.part("P2") == Potentiometer("P2", ("w", "c"), "c", 5e3, adjust=False)
    assert stage.part("S1") == Switch("S1", ("c", "gnd"), closed=False, role="mutes")
    assert stage.part("D1") == Diode("D1", "out", "bias", "signal", DIODE_TYPES["signal"])
    assert stage.part("V1") == FixedVoltage("V1", ("bias", "gnd"), 4.5, role="half the supply")
    zener, led, cap, r1 = (stage.part(name) for name in ("D2", "D3", "C1", "R1"))
    assert isinstance(zener, Diode)
    assert isinstance(led, Diode)
    assert isinstance(cap, TwoTerminal)
    assert isinstance(r1, TwoTerminal)
    assert (zener.model.breakdown_v, zener.temperature_degc) == (5.1, -10.0)
    assert (led.model.saturation_a, led.model.emission) == (1e-18, 1.9)
    assert led.model.series_ohm == DIODE_TYPES["red-led"].series_ohm
    assert math.isinf(led.model.breakdown_v)
    assert cap.half_v == 25.0
    assert (r1.adjust, cap.adjust) == (True, False)
    assert (stage.outputs, stage.temperature_degc) == (("w", "c"), 40.0)
    assert [part.designator for part in stage.settable] == ["R1", "R2", "P1", "P2", "C1", "S1"]


def test_an_expected_figure_names_its_output_and_the_settings_it_holds_at() -> None:
    (expect,) = read(GOOD).expects
    assert expect.output == "c"
    assert dict(expect.parts) == {"P1": 0.25, "P2": 0.5, "S1": 1.0, "R1": 1e3}
    circuit = netlist(read(GOOD), output=expect.output).with_values(dict(expect.parts))
    assert circuit.output_node == "c"
    assert circuit.values["P1"] == 0.25
    assert circuit.values["S1"] == 1.0


def test_a_part_says_nothing_and_has_what_is_usual() -> None:
    stage = read(
        GOOD.replace(', taper = "log", position = "70 %"', "").replace('temperature = "40 degC"\n', "")
    )
    assert stage.part("P1") == Potentiometer("P1", ("gnd", "out"), "w", 10e3, "linear", 0.5)
    assert stage.temperature_degc == 25.0


@pytest.mark.parametrize(
    ("old", "new", "message", "hint"),
    [
        ('ends = ["gnd", "out"]', 'ends = ["gnd"]', "[parts.P1] ends", 'write ends = ["in", "sum"]'),
        ('ends = ["gnd", "out"]', 'ends = ["gnd", "gnd"]', "[parts.P1] ends", "two different nodes"),
        (', wiper = "w"', "", "[parts.P1]: missing key wiper", "write P1 ="),
        ('"10k"', '"5 ohm"', "5 Ω is out of range for a potentiometer", "10 Ω to 100 MΩ"),
        (
            '"log"',
            '"audio"',
            '[parts.P1] taper = "audio": no such taper',
            "tapers are linear, log, reverse-log",
        ),
        ('"70 %"', '"170 %"', '[parts.P1] position = "170 %": beyond the ends', "0 to 1, or 0 % to 100 %"),
        ('"70 %"', "70", "[parts.P1] position = 70: beyond the ends of the track", "0 to 1, or 0 %"),
        ('"70 %"', '"half"', '[parts.P1] position = "half": not a position', "0 to 1"),
        ('"70 %"', "true", "[parts.P1] position = true: true or false where a plain number", ""),
        ('"70 %"', '"nan"', '[parts.P1] position = "nan": beyond the ends', ""),
        ("closed = false", 'closed = "no"', '[parts.S1] closed = "no": a string where true or false', ""),
        ("closed = false, ", "", "[parts.S1]: missing key closed", "write S1 ="),
        ("adjust = true", "adjust = 1", "[parts.R1] adjust = 1: a whole number where true or false", ""),
        ('anode = "out", cathode', 'nodes = ["out", "gnd"], cathode', "a diode has a direction", "anode ="),
        ('cathode = "bias"', 'cathode = "out"', "[parts.D1] cathode", "two different nodes"),
        (
            '"signal"',
            '"signals"',
            '[parts.D1] type = "signals": no such type',
            "did you mean signal? types are",
        ),
        (', breakdown = "5.1 V"', "", "[parts.D2]: missing key breakdown", "zener voltage"),
        ('"5.1 V"', '"0.1 V"', '[parts.D2] breakdown = "0.1 V": out of range', "allowed are 500 mV to 10 kV"),
        (
            '"signal"',
            '"signal", breakdown_current = "1 mA"',
            "without breakdown",
            "write the breakdown voltage",
        ),
        ('"1e-18 A"', '"1 A"', '[parts.D3] saturation = "1 A": out of range', "to 10 mA"),
        ("1.9", "190", "[parts.D3] emission = 190: out of range", "1 to 2 is usual"),
        ("1.9", '"1.9"', "[parts.D3] emission", ""),
        ('"-10 °C"', '"-10"', '[parts.D2] temperature = "-10": no prefix or unit', "25 degC"),
        ('"40 degC"', '"400 degC"', 'temperature = "400 degC": out of range', "allowed are -55 °C to 150 °C"),
        ('"40 degC"', '"40 K"', "temperature = \"40 K\": no such prefix 'K'", "25 degC"),
        ('"25 V"', '"0 V"', '[parts.C1] half_voltage = "0 V": out of range', "allowed are 100 mV to"),
        ("adjust = true", 'half_voltage = "25 V"', '[parts.R1] "half_voltage": no such key', "keys are"),
        ('["bias", "gnd"]', '["bias", "out"]', "[parts.V1] nodes", "a fixed voltage stands on gnd"),
        ('"4.5 V"', '"4.5 A"', '[parts.V1] value = "4.5 A"', "15 V"),
        ('"4.5 V"', '"5 kV"', "5 kV is out of range for a voltage", "-1 kV to 1 kV"),
        ('"supply-"', '"Supply-"', "Supply- could be mistaken for supply-", "write supply-"),
        ('"supply-"', '"supply\N{MINUS SIGN}"', "could be mistaken for supply-", "write supply-"),
        ('"supply-"', '"vcc+"', '"vcc+" is not a node name', "the rails are supply+ and supply-"),
        (
            '["w", "c"]',
            '["w", "zz"]',
            'outputs = ["w", "zz"]: no part is connected to "zz"',
            "nodes are bias, w, c",
        ),
        ('["w", "c"]', '["w", "out"]', "out is not a further output", "without being listed"),
        ('["w", "c"]', '["w", "w"]', "w is listed twice", ""),
        ('["w", "c"]', '"w"', "node names are wanted", "write outputs ="),
        (
            'output = "c"',
            'output = "bp"',
            '[[expect]] 1 output = "bp": not an output',
            "outputs are out, w, c",
        ),
        (
            "S1 = true",
            'S1 = "shut"',
            '[[expect]] 1 parts S1 = "shut": a switch is open or closed',
            "open or closed",
        ),
        ("S1 = true", "S1 = 1", "[[expect]] 1 parts S1 = 1: a switch is open or closed", "true for closed"),
        ("P2 = 0.5", "P2 = 2", "[[expect]] 1 parts P2 = 2: beyond the ends", ""),
        (
            "S1 = true",
            "D1 = 1",
            '[[expect]] 1 parts "D1": no such part with a value',
            "R1, R2, P1, P2, C1, S1",
        ),
    ],
)
def test_a_mistake_names_file_table_and_key(old: str, new: str, message: str, hint: str) -> None:
    assert old in GOOD
    with pytest.raises(PreviewError) as caught:
        read(GOOD.replace(old, new, 1))
    assert isinstance(caught.value, CircuitError)
    assert caught.value.message.startswith("stages/x.toml")
    assert message in caught.value.message
    assert hint in caught.value.hint


def test_a_position_beyond_the_ends_is_a_part_value_error() -> None:
    with pytest.raises(PartValueError, match="beyond the ends"):
        read(GOOD.replace('"70 %"', "1.01"))


def test_negative_fixed_voltages_keep_their_sign() -> None:
    for written in ('"-4.5 V"', '"\N{MINUS SIGN}4.5 V"', "-4.5"):
        part = read(GOOD.replace('"4.5 V"', written)).part("V1")
        assert isinstance(part, FixedVoltage)
        assert part.value == -4.5
