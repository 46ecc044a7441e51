"""Pictures of a response."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from preview.analysis.answers import answers
from preview.circuit.drive import parse_load, parse_source
from preview.circuit.library import open_stages
from preview.circuit.parts import OpAmp, PartKind, Stage, Supply, TwoTerminal
from preview.plots import response_picture
from preview.session import Session
from preview.values.levels import parse_full_scale


def session(stage: Stage, source: str = "none", load: str = "none") -> Session:
    return Session(
        audio=Path("x.wav"),
        stage=stage,
        supply=stage.supply,
        full_scale=parse_full_scale("5 V"),
        source=parse_source(source),
        load=parse_load(load),
    )


def svg_of(one: Session) -> str:
    return response_picture(one, answers(one, [1e3]), "svg").decode("utf-8")


def texts(svg: str) -> str:
    import re

    return " | ".join(re.findall(r"<text[^>]*>([^<]*)</text>", svg)).replace("\N{NO-BREAK SPACE}", " ")


def test_a_png_is_a_png_of_the_same_bytes_each_time() -> None:
    one = session(open_stages(["inverting-low-pass"]))
    found = answers(one, [1e3])
    picture = response_picture(one, found, "png")
    assert picture.startswith(b"\x89PNG\r\n\x1a\n")
    assert len(picture) > 20_000
    assert response_picture(one, found, "png") == picture


def test_an_svg_holds_the_title_the_conditions_and_the_figures_as_text() -> None:
    one = session(open_stages(["inverting-low-pass"]), "10k", "line input, cable 1n")
    svg = svg_of(one)
    assert svg == svg_of(one)
    said = texts(svg)
    for words in (
        "Inverting low-pass",
        "source 10 kΩ; load 10 kΩ, cable 1 nF (typical)",
        "R1 10 kΩ, R2 100 kΩ, C1 1 nF, U1 ideal",
        "13.98 dB, x 5, inverting",
        "20.00 dB, corners 1.59 kHz",
        "as driven and loaded",
        "Group delay, µs",
        "10k",
    ):
        assert words in said


def test_a_cascade_shows_each_stage() -> None:
    said = texts(svg_of(session(open_stages(["inverting-high-pass", "inverting-low-pass"]))))
    assert "Inverting high-pass + Inverting low-pass" in said
    assert "at 1.out" in said


def test_what_does_not_come_to_rest_has_no_step_but_a_picture() -> None:
    parts = (
        TwoTerminal("R1", PartKind.RESISTOR, ("in", "s"), 10e3),
        TwoTerminal("C1", PartKind.CAPACITOR, ("s", "out"), 10e-9),
        OpAmp("U1", "gnd", "s", "out", "ideal"),
    )
    said = texts(svg_of(session(Stage("i", "Integrator", "", Supply(15.0, -15.0), parts))))
    assert "does not come to rest" in said


def test_a_flat_gain_is_drawn_too() -> None:
    parts = (
        TwoTerminal("R1", PartKind.RESISTOR, ("in", "out"), 10e3),
        TwoTerminal("R2", PartKind.RESISTOR, ("out", "gnd"), 10e3),
    )
    assert "-6.02 dB" in texts(svg_of(session(Stage("d", "Divider", "", Supply(15.0, -15.0), parts))))


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("title", ["$x^$ & <b>", "\N{CJK UNIFIED IDEOGRAPH-4E00}" * 90, "long " * 60])
def test_any_title_is_only_text(title: str) -> None:
    one = session(open_stages(["inverting-low-pass"]))
    one = replace(one, stage=replace(one.stage, title=title))
    assert response_picture(one, answers(one, [1e3]), "svg").rstrip().endswith(b"</svg>")
