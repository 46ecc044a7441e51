"""Op-amp types in a stage: by name in its file, by option, and the limits that hold on its rails."""

from __future__ import annotations

import math
import pickle
from pathlib import Path

import pytest

from preview.circuit.library import find_stage, stage_source, with_overrides
from preview.circuit.netlist import OpAmpSite, netlist
from preview.circuit.opamp import IDEAL, PERFECT
from preview.circuit.opamp_library import find_opamp
from preview.circuit.parts import Stage, Supply
from preview.circuit.reader import parse_stage
from preview.errors import CircuitError, StageFileError, UnknownNameError

STAGE = "inverting-low-pass"


def typed(name: str) -> Stage:
    return with_overrides(find_stage(STAGE), {}, {None: name})[0]


def site(name: str, positive_v: float = 15.0, negative_v: float = -15.0) -> OpAmpSite:
    return netlist(typed(name), supply=Supply(positive_v, negative_v)).opamps[0]


def test_a_real_type_brings_its_model_and_its_swing() -> None:
    tl072 = site("tl072")
    assert tl072.type == "TL072"
    assert tl072.model == find_opamp("TL072")
    assert (tl072.high_v, tl072.low_v) == (14.0, -14.0)  # 28 V p-p of 30 V, the sheet's line
    lm358 = site("LM358", 5.0, 0.0)
    assert (lm358.high_v, lm358.low_v) == (3.0, 0.005)


def test_the_common_mode_range_is_in_volts_on_the_rails_in_force() -> None:
    """Motorola TL072 sheet: -12 V to +15 V on ±15 V; the LM358 sheet: V- to V+ less 1.5 V."""
    assert (site("TL072").input_low_v, site("TL072").input_high_v) == (-12.0, 15.0)
    assert (site("TL072", 12.0, -9.0).input_low_v, site("TL072", 12.0, -9.0).input_high_v) == (-6.0, 12.0)
    assert (site("LM358", 9.0, 0.0).input_low_v, site("LM358", 9.0, 0.0).input_high_v) == (0.0, 7.5)
    for name in ("ideal", "perfect"):
        assert (site(name).input_low_v, site(name).input_high_v) == (-math.inf, math.inf)


def test_built_in_types_keep_their_limits() -> None:
    ideal, perfect = site("ideal"), site("perfect")
    assert (ideal.high_v, ideal.low_v, ideal.model) == (15.0, -15.0, IDEAL)
    assert (perfect.high_v, perfect.low_v, perfect.model) == (math.inf, -math.inf, PERFECT)
    assert OpAmpSite("U1", "a", "b", "c", "ideal", 1.0, -1.0).model is IDEAL
    assert {opamp.type for opamp in find_stage(STAGE).opamps} == {"ideal"}


@pytest.mark.parametrize(
    ("name", "rails", "message"),
    [
        (
            "MCP6002",
            (15.0, -15.0),
            "15 V and -15 V, 30 V in all, is outside the range of MCP6002, 1.8 V to 6 V",
        ),
        ("NE5532", (2.5, -2.5), "5 V in all, is outside the range of NE5532, 10 V to 44 V"),
        ("NE5532-2025", (20.0, -20.0), "outside the range of NE5532-2025, 6 V to 36 V"),
        ("LM741", (2.5, -2.5), r"LM741, 6 V to 36 V \(assumed of its class"),
    ],
)
def test_a_supply_outside_the_types_range_is_refused(
    name: str, rails: tuple[float, float], message: str
) -> None:
    with pytest.raises(CircuitError, match=message) as caught:
        site(name, *rails)
    assert "U1" in caught.value.message
    assert caught.value.exit_code == 5


def test_the_ends_of_the_range_are_taken() -> None:
    assert site("MCP6002", 6.0, 0.0).high_v == pytest.approx(5.975)
    assert site("NE5532", 22.0, -22.0).high_v == 20.5


def test_rails_that_leave_no_swing_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "weak.toml"
    path.write_text(
        """
title = "Weak"
class = "bipolar"
[figures]
gain_bandwidth = { value = "1 MHz", source = "test", found = "read" }
slew = { value = "1 V/us", source = "test", found = "read" }
supply_min = { value = "2 V", source = "test", found = "read" }
""",
        "utf-8",
    )
    assert site(str(path), 5.0, 0.0).type == "weak"
    with pytest.raises(CircuitError, match=r"weak swings to 1.5 V below .* leaves nothing of 3 V and 0 V"):
        site(str(path), 3.0, 0.0)


def test_a_file_can_be_given_for_one_op_amp(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    source = (Path(__file__).parents[2] / "preview/opamps/OP27.toml").read_text("utf-8")
    path.write_text(source.replace('"8 MHz"', '"9 MHz"'), "utf-8")
    changed, notes = with_overrides(find_stage(STAGE), {}, {"u1": str(path)})
    assert notes == (f"U1: op-amp type {path}",)
    assert netlist(changed).opamps[0].model.gain_bandwidth_hz == 9e6


def test_a_stage_file_names_a_type_in_any_case() -> None:
    text = stage_source(STAGE).replace('type = "ideal"', 'type = "opa2134"')
    stage = parse_stage(text, name="x", file="x.toml")
    assert stage.opamps[0].type == "OPA2134"
    with pytest.raises(
        UnknownNameError, match=r'x.toml \[parts.U1\] type = "TLO72": no op-amp type named'
    ) as caught:
        parse_stage(text.replace("opa2134", "TLO72"), name="x", file="x.toml")
    assert caught.value.hint.startswith("did you mean TL072?")
    with pytest.raises(StageFileError, match="a file, where a type's name is wanted") as refused:
        parse_stage(text.replace("opa2134", "../mine.toml"), name="x", file="x.toml")
    assert refused.value.hint == "give the file when the stage is used: --opamp U1=FILE"


def test_a_site_survives_the_way_to_another_process() -> None:
    sent = site("TL072")
    assert pickle.loads(pickle.dumps(sent)) == sent
