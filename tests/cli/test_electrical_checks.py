"""What cannot be, or is hardly meant, in a stage file of one's own: said before anything runs, with its cure."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.cli import main

HEAD = 'title = "Mine"\nsupply = { positive = "15 V", negative = "-15 V" }\n[parts]\n'


def resistor(name: str, a: str, b: str, value: str = "10k") -> str:
    return f'{name} = {{ kind = "resistor", nodes = ["{a}", "{b}"], value = "{value}" }}\n'


def capacitor(name: str, a: str, b: str, value: str = "10n") -> str:
    return f'{name} = {{ kind = "capacitor", nodes = ["{a}", "{b}"], value = "{value}" }}\n'


def fixed(name: str, a: str, value: str) -> str:
    return f'{name} = {{ kind = "voltage", nodes = ["{a}", "gnd"], value = "{value}" }}\n'


def opamp(plus: str, minus: str, type_name: str = "ideal") -> str:
    return (
        f'U1 = {{ kind = "opamp", plus = "{plus}", minus = "{minus}", out = "out", type = "{type_name}" }}\n'
    )


INVERTING = resistor("R1", "in", "sum") + resistor("R2", "sum", "out") + opamp("gnd", "sum")
SALLEN_KEY = (
    resistor("R1", "in", "a")
    + resistor("R2", "a", "b")
    + capacitor("C1", "a", "out")
    + capacitor("C2", "b", "gnd")
    + resistor("R3", "m", "gnd")
    + resistor("R4", "m", "out", "22k")  # K = 3.2; Q = 1 / (3 - K), Sallen and Key 1955
    + opamp("b", "m")
)

ERRORS = {
    "floating node": (
        INVERTING + resistor("R3", "x", "y") + capacitor("C1", "x", "y"),
        "nodes x and y are floating",
        "such as a resistor of 1 MΩ from x to gnd",
    ),
    "no DC path to an input": (
        capacitor("C1", "in", "p")
        + resistor("R2", "s", "out")
        + resistor("R3", "s", "gnd")
        + opamp("p", "s"),
        "node p is floating: no direct current can flow through C1 and the + input of U1",
        "such as a resistor of 1 MΩ from p to gnd",
    ),
    "loop of voltage sources": (
        INVERTING + fixed("V1", "b", "4.5 V") + fixed("V2", "b", "5 V") + resistor("R3", "b", "sum"),
        "V2 and V1 both hold node b: a loop of voltage sources",
        "take one away, or put a resistor between them",
    ),
    "a source on the output": (
        INVERTING + fixed("V1", "out", "4.5 V"),
        "the output of U1 is on node out, which V1 holds",
        "give the output a node of its own",
    ),
    "missing feedback": (
        resistor("R1", "in", "s")
        + resistor("R2", "s", "gnd")
        + resistor("R3", "out", "gnd")
        + opamp("gnd", "s"),
        "U1 has no feedback: nothing leads from its output out to its - input",
        "join its output to its - input by a part",
    ),
    "negative value": (
        INVERTING.replace('"10k"', '"-10k"', 1),
        '[parts.R1] value = "-10k": a resistor must be above zero',
        "allowed are 1 mΩ to 1 TΩ",
    ),
    "supply outside the type's range": (
        INVERTING.replace("ideal", "MCP6002"),
        "15 V and -15 V, 30 V in all, is outside the range of MCP6002, 1.8 V to 6 V",
        "another supply, or another type",
    ),
    "unstable loop": (
        SALLEN_KEY,
        "the circuit is unstable: left alone it oscillates at 1584 Hz",
        "less positive feedback, a lower gain in the loop",
    ),
}


@pytest.mark.parametrize("name", ERRORS)
def test_what_cannot_be_is_refused_with_its_cure(capsys, tmp_path: Path, name: str) -> None:
    parts, message, cure = ERRORS[name]
    file = tmp_path / "mine.toml"
    file.write_text(HEAD + parts, "utf-8")
    soundfile.write(tmp_path / "in.wav", np.zeros((480, 1)), 48_000)
    for words in (["response"], ["render", str(tmp_path / "in.wav"), str(tmp_path / "out.wav")]):
        assert main([*words, "--stage", str(file)]) == 5
        said = capsys.readouterr()
        assert said.out == ""
        assert message in said.err
        assert cure in said.err
        assert "Traceback" not in said.err
    assert not (tmp_path / "out.wav").exists()


def test_a_shorted_output_is_computed_with_a_warning_and_its_cure(capsys, tmp_path: Path) -> None:
    file = tmp_path / "mine.toml"
    switch = 'S1 = { kind = "switch", nodes = ["out", "gnd"], closed = true }\n'
    file.write_text(HEAD + INVERTING + switch, "utf-8")
    assert main(["response", "--stage", str(file), "--at", "1k"]) == 0
    said = capsys.readouterr().err
    assert "warning: S1 shorts gnd and the output of U1 (open it" in said
    assert main(["response", "--stage", str(file), "--at", "1k", "--part", "S1=open"]) == 0
    assert "warning" not in capsys.readouterr().err
