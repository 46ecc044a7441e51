"""Damaged stage files end in a stage or in one of the project's own errors, never in a traceback."""

from __future__ import annotations

import contextlib

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from preview.circuit.library import stage_source
from preview.circuit.netlist import netlist
from preview.circuit.parts import Stage
from preview.circuit.reader import parse_stage
from preview.circuit.tables import decode
from preview.errors import CircuitError, printable

NAMES = ("inverting-low-pass", "non-inverting-gain")
FURTHER = """
P1 = { kind = "potentiometer", ends = ["gnd", "out"], wiper = "w", value = "10k", taper = "log", position = "70 %" }
R9 = { kind = "resistor", nodes = ["w", "supply+"], value = "100k" }
C9 = { kind = "capacitor", nodes = ["w", "gnd"], value = "1u", half_voltage = "25 V" }
S1 = { kind = "switch", nodes = ["w", "bias"], closed = false }
D1 = { kind = "diode", anode = "out", cathode = "w", type = "zener", breakdown = "5.1 V", temperature = "40 degC" }
V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V" }
"""
"""Parts of the other kinds, put among the parts of a bundled stage."""
SCRAPS = (
    *("[", "]", "{", "}", '"', "'''", "=", ",", ".", "\n", "\\", "\\u0000", "#", "é", "\x00", "\u202e"),
    *("in", "out", "gnd", "source", "sum", "GND", "R1", "C1", "U1", "Rload", "resistor", "opamp", "diode"),
    *(
        '"supply-"',
        '"switch"',
        '"potentiometer"',
        '"voltage"',
        '"signal"',
        "outputs",
        "temperature",
        '"12 degC"',
    ),
    *("nan", "-inf", "1e999", "0", "-1", "true", "1979-05-27", "9" * 30, "[[expect]]", "[parts]", "%", "dB"),
    *('"4k7"', '"0"', '"-1"', '"1e300"', "parts = 3", "value", "nodes", "[1, 2]", "{}", "[]", "kind"),
)


def attempt(data: bytes) -> None:
    """Read and check it as a stage; only the circuit family may be raised, and only clean text leaves."""
    outcome: Stage | CircuitError
    try:
        outcome = parse_stage(decode(data, "x.toml"), name="x", file="x.toml")
    except CircuitError as error:
        outcome = error
    if isinstance(outcome, Stage):
        assert outcome.title == printable(outcome.title)
        with contextlib.suppress(CircuitError):
            netlist(outcome)
    else:
        assert str(outcome) == printable(str(outcome))
        assert len(str(outcome)) < 1000


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(
    name=st.sampled_from(NAMES),
    edits=st.lists(
        st.tuples(st.floats(0, 1), st.integers(0, 12), st.sampled_from(SCRAPS)), min_size=1, max_size=3
    ),
)
def test_spliced_stage_files(name: str, edits: list[tuple[float, int, str]]) -> None:
    text = with_further_parts(name)
    for place, length, scrap in edits:
        start = int(place * len(text))
        text = text[:start] + scrap + text[start + length :]
    attempt(text.encode("utf-8", "surrogatepass"))


def with_further_parts(name: str) -> str:
    return stage_source(name).replace("[parts]\n", "[parts]" + FURTHER, 1)


def test_the_stage_with_further_parts_is_sound() -> None:
    for name in NAMES:
        assert len(netlist(parse_stage(with_further_parts(name), name="x", file="x.toml")).ports) == 2


@settings(max_examples=150, deadline=None, derandomize=True)
@given(name=st.sampled_from(NAMES), word=st.integers(0, 400), scrap=st.sampled_from(SCRAPS))
def test_swapped_words(name: str, word: int, scrap: str) -> None:
    words = with_further_parts(name).split(" ")
    words[word % len(words)] = scrap
    attempt(" ".join(words).encode())


@settings(max_examples=100, deadline=None, derandomize=True)
@given(place=st.floats(0, 1), data=st.binary(max_size=8))
def test_raw_bytes(place: float, data: bytes) -> None:
    source = stage_source("inverting-high-pass").encode()
    start = int(place * len(source))
    attempt(source[:start] + data + source[start + len(data) :])


_SCALARS = (
    st.none() | st.booleans() | st.integers() | st.floats() | st.sampled_from(SCRAPS) | st.text(max_size=5)
)


def _toml(value: object) -> str:
    """A value as TOML text (None becomes a date)."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_toml(str(k))} = {_toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_toml, value)) + "]"
    if isinstance(value, str):
        body = "".join(
            ch if ch.isascii() and ch.isalnum() else f"\\U{ord(ch):08x}"
            for ch in value
            if not 0xD800 <= ord(ch) < 0xE000
        )
        return f'"{body}"'
    if value is None:
        return "1979-05-27"
    return str(value).lower()


@settings(max_examples=150, deadline=None, derandomize=True)
@given(
    key=st.sampled_from(("title", "about", "supply", "parts", "outputs", "temperature", "expect", "drawing")),
    inner=st.sampled_from(
        (
            "",
            "R1",
            "U1",
            "D1",
            "anode",
            "closed",
            "position",
            "positive",
            "negative",
            "kind",
            "nodes",
            "value",
            "what",
            "within",
        )
    ),
    value=st.recursive(
        _SCALARS,
        lambda v: st.lists(v, max_size=3) | st.dictionaries(st.text(max_size=4), v, max_size=3),
        max_leaves=6,
    ),
)
def test_wrong_types_everywhere(key: str, inner: str, value: object) -> None:
    table: dict[str, object] = {
        "title": "x",
        "supply": {"positive": "15", "negative": "-15"},
        "parts": {"R1": {"kind": "resistor", "nodes": ["in", "out"], "value": "1k"}},
    }
    for option in (value, {inner: value}, {"R1": {inner: value}}, [{inner: value}]):
        attempt("\n".join(f"{k} = {_toml(v)}" for k, v in (table | {key: option}).items()).encode())
