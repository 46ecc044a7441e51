"""Three hundred mutated stage files of every kind of part, and as many op-amp files: each is refused, or answered
rightly.

A mutation is what a person does to a file: a value, a node, a key, a type changed, a part put in or taken out. What is
still a circuit is solved by a nodal analysis written here for the purpose, in the plainest form of the textbooks, and
the program's answer must be that one.
"""

from __future__ import annotations

import contextlib
import copy
import math
import time
import tomllib
from dataclasses import replace
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from preview.analysis.answers import answers
from preview.circuit.drive import parse_load, parse_source
from preview.circuit.library import find_stage, stage_names, stage_source
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OVERDRIVES
from preview.circuit.opamp_library import opamp_names
from preview.circuit.opamp_units import FIGURES, format_figure
from preview.circuit.parts import PartKind, Stage
from preview.circuit.reader import parse_stage
from preview.dsp.stage import StageProcessor
from preview.engine.tomltext import toml_text
from preview.errors import CircuitError, NotationError, PreviewError, printable
from preview.network.transfer import response
from preview.session import Session
from preview.values.levels import parse_full_scale
from preview.values.quality import Quality

FREQUENCY_HZ = (10.0, 1e3, 15e3, 100e3)
LONGEST_S = 20.0
"""Processor time that one file may take; the usual is some hundredths."""

VALUES = (
    *("1k", "4k7", "10k", "220k", "1M", "R1", "100R", "10n", "1u", "100p", "1 mH", "47 nF", "3.3"),
    *(
        "0",
        "-1k",
        "4z7",
        "",
        "1e300",
        "nan",
        "inf",
        "10 Hz",
        "4m7",
        "1T",
        "k",
        "¼",
        4.7e3,
        1e-9,
        0,
        -1,
        math.nan,
        math.inf,
    ),
    *(True, [], {}),
)
NODES = (
    "in",
    "out",
    "gnd",
    "sum",
    "a",
    "x",
    "plus",
    "minus",
    "supply+",
    "supply-",
    "source",
    "GND",
    "",
    "two words",
    3,
)
DIODES = ("diode",)
FITTING: dict[str, tuple[tuple[str, ...], tuple[Any, ...]]] = {
    "position": (("potentiometer",), (0, 1, 0.5, 0.01, "70 %", 1e-12)),
    "taper": (("potentiometer",), ("linear", "log", "reverse-log")),
    "closed": (("switch",), (True, False)),
    "half_voltage": (("capacitor",), ("25 V", "1 V", "100 mV", 16, "6.3", "1 kV")),
    "breakdown": (DIODES, ("5.1 V", "2.4 V", "3", 12.0)),
    "emission": (DIODES, (1, 2.0, 0.5, 20)),
    "saturation": (DIODES, ("1 nA", "1 fA", "1 mA")),
    "series": (DIODES, ("1 ohm", "0", "1k")),
    "capacitance": (DIODES, ("4 pF", "0", "1 nF")),
    "temperature": (DIODES, ("40 degC", 70, "-40 degC")),
    "type": (("opamp",), opamp_names()),
    "anode": (DIODES, ("gnd", "out", "supply-", "in")),
}
"""What each kind of part takes: key, kinds, values."""
WRONG: dict[str, tuple[Any, ...]] = {
    "position": ("130 %", -0.1, "x", math.nan),
    "taper": ("square", 1),
    "closed": ("open", 1),
    "half_voltage": ("0", "-3 V", "1 uV", "1 MV"),
    "breakdown": ("0.1 V", "-5 V", ""),
    "emission": (0, 50, "1", math.inf),
    "saturation": ("0", "1 A"),
    "series": ("E25", 24, "1 Mohm"),
    "capacitance": ("1 F", "-1p"),
    "temperature": ("-300 degC", "100 K"),
    "tolerance": ("0 %", "200 %", 0.01),
    "dielectric": (3, "a\nb"),
    "type": ("TLO72", "nope.toml", "", 741, "led"),
    "kind": (*PartKind, "transistor", 1),
    "adjust": ("yes",),
    "role": ("\x1b[31m", 1),
}
"""What no part takes."""
NEW_PARTS: tuple[dict[str, Any], ...] = (
    {"kind": "resistor", "nodes": ["a", "b"], "value": "10k"},
    {"kind": "capacitor", "nodes": ["a", "b"], "value": "10n"},
    {
        "kind": "capacitor",
        "nodes": ["a", "b"],
        "value": "1u",
        "dielectric": "X7R ceramic",
        "half_voltage": "6 V",
    },
    {"kind": "inductor", "nodes": ["a", "b"], "value": "10 mH"},
    {
        "kind": "potentiometer",
        "ends": ["a", "b"],
        "wiper": "c",
        "value": "10k",
        "taper": "log",
        "position": 0.3,
    },
    {"kind": "switch", "nodes": ["a", "b"], "closed": True},
    {"kind": "switch", "nodes": ["a", "b"], "closed": False},
    {"kind": "diode", "anode": "a", "cathode": "b", "type": "signal"},
    {"kind": "diode", "anode": "a", "cathode": "b", "type": "zener", "breakdown": "5.1 V"},
    {"kind": "voltage", "nodes": ["a", "gnd"], "value": "2.5 V"},
    {"kind": "opamp", "plus": "a", "minus": "b", "out": "b", "type": "TL072"},
)
SOURCES = (
    "0",
    "0",
    "600",
    "7k5 + 2.5 H, winding 120p, cable 500p",
    "20 nF",
    "passive coil pickup",
    "dynamic microphone",
    "banana",
)
LOADS = ("none", "none", "10k", "10k || 220p", "headphones 32 ohm", "cable 1n", "line input, cable 500p", "0")
SUPPLIES = (
    {"positive": "9 V", "negative": "0 V"},
    {"positive": "15 V", "negative": "-15 V"},
    {"positive": "-1", "negative": "1"},
)

Mutation = tuple[str, float, float, Any]

pick = st.floats(0, 1, exclude_max=True)


def keyed(values: dict[str, tuple[Any, ...]]) -> st.SearchStrategy[Mutation]:
    return st.sampled_from([*values]).flatmap(
        lambda key: st.tuples(st.just(key), pick, pick, st.sampled_from(values[key]))
    )


likely = st.one_of(
    st.tuples(st.just("scale"), pick, pick, st.floats(-3, 3)),
    st.tuples(st.just("put"), pick, pick, st.sampled_from(NEW_PARTS)),
    keyed({key: values for key, (_, values) in FITTING.items()}),
)
rough = st.one_of(
    st.tuples(st.just("value"), pick, pick, st.sampled_from(VALUES)),
    st.tuples(st.just("node"), pick, pick, st.sampled_from(NODES)),
    st.tuples(st.just("rewire"), pick, pick, pick),
    st.tuples(st.just("out"), pick, pick, st.none()),
    st.tuples(st.just("drop"), pick, pick, st.none()),
    keyed(WRONG),
    st.tuples(st.just("supply"), pick, pick, st.sampled_from(SUPPLIES)),
)
mutations = st.one_of(
    st.lists(likely, min_size=1, max_size=4),
    st.lists(likely, min_size=1, max_size=4),
    st.lists(st.one_of(likely, rough), min_size=1, max_size=3),
)
stage_files = st.tuples(st.sampled_from([*stage_names(), *["soft-limiter", "example"] * 5]), mutations)


def opened(name: str) -> dict[str, Any]:
    if name == "example":
        return tomllib.loads((Path(__file__).parents[2] / "preview/circuit/example.toml").read_text("utf-8"))
    return tomllib.loads(stage_source(name))


def mutated(name: str, changes: list[Mutation]) -> dict[str, Any]:
    """The stage's table with the changes made."""
    table = copy.deepcopy(opened(name))
    table.pop("expect", None)
    for what, at, where, new in changes:
        parts = table["parts"]
        if not parts:
            break
        fitting = [
            name for name in parts if what not in FITTING or parts[name].get("kind") in FITTING[what][0]
        ]
        if not fitting:
            continue
        designator = fitting[int(at * len(fitting))]
        part = parts[designator]
        places = [
            key
            for key in ("nodes", "ends", "wiper", "anode", "cathode", "plus", "minus", "out")
            if key in part
        ]
        nodes = sorted({node for other in parts.values() for node in nodes_of(other)})
        if what in ("node", "rewire") and places:
            key = places[int(where * len(places))]
            node = nodes[int(new * len(nodes))] if what == "rewire" else new
            if isinstance(part[key], list):
                part[key][int(where * 1000) % len(part[key])] = node
            else:
                part[key] = node
        elif what == "out":
            del parts[designator]
        elif what == "drop":
            del part[[*part][int(where * len(part))]]
        elif what == "put":
            added = copy.deepcopy(new)
            chosen = {"a": nodes[int(at * len(nodes))], "b": nodes[int(where * len(nodes))], "c": nodes[-1]}
            for key, held in added.items():
                if key in ("nodes", "ends"):
                    added[key] = [chosen.get(node, node) for node in held]
                elif key in ("wiper", "anode", "cathode", "plus", "minus", "out"):
                    added[key] = chosen.get(held, held)
            parts[f"{'U' if new['kind'] == 'opamp' else 'X'}9{len(parts)}"] = added
        elif what == "scale":
            drawn = {
                one.designator: one for one in parse_stage(toml_text(opened(name)), name="x", file="x").valued
            }
            if designator in drawn:
                part["value"] = drawn[designator].value * 10.0**new
        elif what == "supply":
            table["supply"] = new
        elif what == "linear":
            table["parts"] = {name: one for name, one in parts.items() if one.get("kind") != "diode"}
            for one in table["parts"].values():
                one.pop("half_voltage", None)
        elif what not in ("node", "rewire", "scale"):
            part[what] = new
    return table


def nodes_of(part: dict[str, Any]) -> list[str]:
    names = [*part.get("nodes", ()), *part.get("ends", ())]
    names += [part[key] for key in ("wiper", "anode", "cathode", "plus", "minus", "out") if key in part]
    return [name for name in names if isinstance(name, str)] or ["in"]


def textbook_response(circuit: Netlist, frequency_hz: float) -> complex:
    """Output per input volt, by modified nodal analysis with a nullor for each op-amp [HoRuehliBrennan1975]."""
    names = list(circuit.nodes)
    row = {name: n for n, name in enumerate(names)}
    held = [circuit.input_node, *(fixed.node for fixed in circuit.fixed)]
    size = len(names) + len(held) + len(circuit.opamps)
    matrix, right = np.zeros((size, size), dtype=complex), np.zeros(size, dtype=complex)
    s = 2j * np.pi * frequency_hz
    for branch in circuit.branches:
        value, kind = branch.value, branch.kind
        admittance = (
            1 / value
            if kind is PartKind.RESISTOR
            else s * value
            if kind is PartKind.CAPACITOR
            else 1 / (s * value)
        )
        for one, other in ((branch.a, branch.b), (branch.b, branch.a)):
            if one in row:
                matrix[row[one], row[one]] += admittance
                if other in row:
                    matrix[row[one], row[other]] -= admittance
    for n, node in enumerate(held, len(names)):
        matrix[row[node], n] = matrix[n, row[node]] = 1
        right[n] = 1.0 if node == circuit.input_node else 0.0
    for n, site in enumerate(circuit.opamps, len(names) + len(held)):
        matrix[row[site.out], n] = 1
        for node, sign in ((site.plus, 1), (site.minus, -1)):
            if node in row:
                matrix[n, row[node]] += sign
    scale = np.abs(matrix).max(axis=1)
    return complex(np.linalg.solve(matrix / scale[:, None], right / scale)[row[circuit.output_node]])


def check_refusal(error: PreviewError) -> None:
    """One line of clean text that is no essay."""
    text = str(error)
    assert text == printable(text)
    assert len(text) < 1000


def opened_or_refused(name: str, changes: list[Mutation], source: str, load: str) -> Session | None:
    """The session on that file; None where it is refused, in one clean line and with the right family of errors."""
    try:
        stage = parse_stage(toml_text(mutated(name, changes)), name="x", file="x.toml")
        session = Session(None, stage, stage.supply, parse_full_scale("+18 dBu"))
        session = Session(
            None, stage, stage.supply, session.full_scale, source=parse_source(source), load=parse_load(load)
        )
        session.netlist()
    except (CircuitError, NotationError) as error:
        check_refusal(error)
        return None
    return session


OPAMP_WRONG = ("", "-1", "4z7", "1e300 V", "nan", "10 furlongs", "wraps", 3, True, [], {})

likely_figure = st.tuples(st.sampled_from([*FIGURES]), st.floats(0, 1))
rough_figure = st.one_of(
    likely_figure,
    st.tuples(st.sampled_from([*FIGURES]), st.sampled_from(OPAMP_WRONG)),
    st.tuples(st.sampled_from(["out", "swing", "load"]), st.floats(0, 1)),
)
figure_changes = st.one_of(
    st.lists(likely_figure, min_size=1, max_size=5),
    st.lists(likely_figure, min_size=1, max_size=5),
    st.lists(rough_figure, min_size=1, max_size=3),
)


def figure_text(name: str, at: float) -> str:
    """A value between the least and the largest that the figure can have, ends included, as a file writes it."""
    figure = FIGURES[name]
    if figure.unit == "overdrive":
        return OVERDRIVES[int(at * len(OVERDRIVES)) % len(OVERDRIVES)]
    if figure.low > 0.0:
        return format_figure(figure.low * (figure.high / figure.low) ** at, figure.unit, digits=6)
    return format_figure(figure.low + (figure.high - figure.low) * at**6, figure.unit, digits=6)


def mutated_opamp(name: str, changes: list[tuple[str, Any]]) -> str:
    """The op-amp file with the changes made."""
    table = tomllib.loads(files("preview").joinpath("opamps", f"{name}.toml").read_text("utf-8"))
    figures, swings = table["figures"], table.get("swing", [])
    for what, new in changes:
        if what == "out":
            figures.pop([*figures][int(new * len(figures)) % len(figures)], None)
        elif what == "swing" and swings:
            swings[-1]["high"] = f"{40 * new:.3f} V"
        elif what == "load" and swings:
            swings[-1]["load"] = f"{1 + 1e4 * new:.1f} ohm"
        elif what in FIGURES:
            value = figure_text(what, new) if isinstance(new, float) else new
            figures[what] = {"value": value, "source": "mutated", "found": "memory"}
    for whole, pair in (
        ("slew", ("slew_up", "slew_down")),
        ("current_limit", ("current_source", "current_sink")),
    ):
        if any(
            one in figures for one in pair
        ):  # both or none of the pair, else it is refused before all else
            other = figures.pop(whole, figures.get(pair[0], figures.get(pair[1])))
            for one in pair:
                figures.setdefault(one, other)
    return toml_text(table)


def with_opamp(path: Path, text: str, stage: str) -> Session | None:
    """The session on that stage with the op-amp of that file; None where it is refused, in one clean line."""
    path.write_text(text, "utf-8")
    drawn = find_stage(stage)
    try:
        for opamp in drawn.opamps:
            drawn = drawn.with_part(replace(opamp, type=str(path)))
        session = Session(None, drawn, drawn.supply, parse_full_scale("+18 dBu"))
        session.netlist()
    except CircuitError as error:
        check_refusal(error)
        return None
    return session


def is_ideal(stage: Stage, circuit: Netlist) -> bool:
    return not circuit.ports and all(o.type in ("ideal", "perfect") for o in stage.opamps)


@pytest.mark.timeout(900)
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[*HealthCheck])
@given(file=stage_files, source=st.sampled_from(SOURCES), load=st.sampled_from(LOADS), ideal=st.booleans())
def test_three_hundred_mutated_files_are_refused_or_answered_rightly(
    file: tuple[str, list[Mutation]], source: str, load: str, ideal: bool
) -> None:
    began = time.process_time()
    name, changes = file
    if ideal:
        changes = [*changes, *(("type", n / 10, 0.0, "ideal") for n in range(10)), ("linear", 0.0, 0.0, None)]
    session = opened_or_refused(name, changes, source, load)
    if session is not None:
        with contextlib.suppress(CircuitError):
            circuit = session.netlist()
            found = response(circuit, FREQUENCY_HZ)
            assert np.isfinite(found).all()
            if is_ideal(session.stage, circuit):
                for frequency_hz, gain in zip(FREQUENCY_HZ, found, strict=True):
                    wanted = textbook_response(circuit, frequency_hz)
                    assert abs(gain - wanted) <= 1e-6 * max(abs(wanted), 1e-9)
            told = answers(session, FREQUENCY_HZ)
            assert math.isfinite(told.driven.gain_db) or told.driven.gain_db == -math.inf
            assert not any("nan" in line.lower() for line in told.as_lines())
    assert time.process_time() - began < LONGEST_S


@pytest.mark.slow
@pytest.mark.timeout(3600)
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[*HealthCheck])
@given(name=st.sampled_from(opamp_names()[2:]), changes=figure_changes, stage=st.sampled_from(stage_names()))
def test_three_hundred_mutated_opamp_files_are_refused_or_answered(
    tmp_path_factory: pytest.TempPathFactory, name: str, changes: list[tuple[str, Any]], stage: str
) -> None:
    session = with_opamp(tmp_path_factory.getbasetemp() / "MINE.toml", mutated_opamp(name, changes), stage)
    if session is None:
        return
    began = time.process_time()
    with contextlib.suppress(CircuitError):
        assert np.isfinite(response(session.netlist(), FREQUENCY_HZ)).all()
        told = answers(session, FREQUENCY_HZ)
        assert not any("nan" in line.lower() for line in told.as_lines())
    assert time.process_time() - began < LONGEST_S


@pytest.mark.slow
@pytest.mark.timeout(3600)
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[*HealthCheck])
@given(
    name=st.sampled_from(opamp_names()[2:]),
    changes=figure_changes,
    stage=st.sampled_from(
        ("inverting-low-pass", "sallen-key-low-pass", "soft-limiter", "single-supply-gain")
    ),
    level=st.floats(-3, 1.5),
)
def test_three_hundred_mutated_opamp_files_run_without_a_nan_or_a_hang(
    tmp_path_factory: pytest.TempPathFactory,
    name: str,
    changes: list[tuple[str, Any]],
    stage: str,
    level: float,
) -> None:
    session = with_opamp(tmp_path_factory.getbasetemp() / "MINE.toml", mutated_opamp(name, changes), stage)
    if session is not None:
        run(session, level)


@pytest.mark.slow
@pytest.mark.timeout(3600)
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[*HealthCheck])
@given(
    file=stage_files, source=st.sampled_from(SOURCES), load=st.sampled_from(LOADS), level=st.floats(-3, 1.5)
)
def test_three_hundred_mutated_files_run_without_a_nan_or_a_hang(
    file: tuple[str, list[Mutation]], source: str, load: str, level: float
) -> None:
    session = opened_or_refused(*file, source, load)
    if session is not None:
        run(session, level)


def run(session: Session, level: float) -> None:
    """A burst of noise through the circuit: finite, in time, and a fault that can be said."""
    began = time.process_time()
    volts = 10.0**level * np.random.default_rng(3).standard_normal((240, 1))
    heard = np.zeros_like(volts)
    try:
        processor = StageProcessor(session.netlist(), sample_rate_hz=48e3, channels=1, quality=Quality.DRAFT)
    except CircuitError:
        return
    processor.process(volts, heard)
    assert np.isfinite(heard).all()
    if processor.fault is not None:
        assert str(processor.fault) == printable(str(processor.fault))
    assert time.process_time() - began < LONGEST_S
