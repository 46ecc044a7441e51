"""Finding stages by name or file, and changing parts from option texts."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import pytest

from preview.analysis.figures import evaluate
from preview.circuit import library
from preview.circuit.cautions import warnings
from preview.circuit.controls import TAPERS
from preview.circuit.diodes import DIODE_TYPES
from preview.circuit.figures import FIGURES
from preview.circuit.library import find_stage, new_stage_file, stage_names, stage_source, with_overrides
from preview.circuit.netlist import netlist
from preview.circuit.part_reader import read_part
from preview.circuit.parts import PartKind
from preview.circuit.tables import Table
from preview.errors import (
    NotationError,
    OutputFileError,
    PartValueError,
    StageFileError,
    UnknownNameError,
    UsageError,
)


@pytest.fixture(autouse=True)
def own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The person's own stage folder, not there yet."""
    folder = tmp_path / "config" / "stages"
    monkeypatch.setattr(library, "user_stage_folder", lambda: folder)
    return folder


def test_bundled_stages_are_found_by_name() -> None:
    for name in stage_names():
        assert find_stage(name).name == name
        assert find_stage(name).path is None


def test_a_stage_is_read_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(stage_source("inverting-low-pass"), "utf-8")
    stage = find_stage(str(path))
    assert (stage.name, stage.path) == ("mine", path)
    assert stage.parts == find_stage("inverting-low-pass").parts
    assert stage_source(str(path)) == stage_source("inverting-low-pass")


def test_a_stage_in_the_own_folder_is_found_by_name_after_the_bundled_ones(own_folder: Path) -> None:
    own_folder.mkdir(parents=True)
    source = stage_source("inverting-low-pass")
    (own_folder / "a-stage.toml").write_text(source.replace("Inverting low-pass", "Mine"), "utf-8")
    (own_folder / "inverting-low-pass.toml").write_text("broken", "utf-8")
    (own_folder / "notes.txt").write_text("no stage", "utf-8")
    assert stage_names()[-1] == "a-stage"
    assert len(stage_names()) == len(set(stage_names()))
    assert find_stage("a-stage").title == "Mine"
    assert stage_source("a-stage").startswith('title = "Mine"')
    assert find_stage("inverting-low-pass").title == "Inverting low-pass"


@pytest.mark.parametrize("name", ["inverting-lowpass", "Inverting-Low-Pass", "inverting-low-pas"])
def test_an_unknown_name_is_answered_with_the_nearest(name: str) -> None:
    with pytest.raises(UnknownNameError, match=f"no stage named {name}") as caught:
        find_stage(name)
    assert caught.value.hint.startswith("did you mean inverting-low-pass or ")
    assert f"preview stages lists all {len(stage_names())}" in caught.value.hint
    assert caught.value.exit_code == 5


@pytest.mark.parametrize("name", ["", "zzz", "..", "a\x1b[2J", "x" * 100_000])
def test_an_unknown_name_is_short_and_clean(name: str) -> None:
    with pytest.raises(UnknownNameError, match="preview stages lists all") as caught:
        find_stage(name)
    assert "\x1b" not in str(caught.value)
    assert len(str(caught.value)) < 300


@pytest.mark.parametrize("name", ["nowhere.toml", "stages/nowhere", "./nowhere", "~nobody-here/x.toml"])
def test_what_looks_like_a_file_is_one(name: str) -> None:
    with pytest.raises(StageFileError, match="no such file"):
        find_stage(name)


def test_part_values_come_from_texts_and_are_echoed() -> None:
    stage, notes = with_overrides(find_stage("inverting-low-pass"), {"R1": "4k7", "c1": "2n2"}, {})
    assert {part.designator: part.value for part in stage.valued} == {"R1": 4.7e3, "R2": 1e5, "C1": 2.2e-9}
    assert notes == ("R1: 4k7 = 4.7 kΩ (4700 ohm)", "C1: 2n2 = 2.2 nF (2.2e-9 farad)")


def test_op_amp_types_come_from_texts_and_a_named_one_goes_before_all() -> None:
    stage = find_stage("inverting-low-pass")
    assert with_overrides(stage, {}, {None: "perfect"})[0].opamps[0].type == "perfect"
    changed, notes = with_overrides(stage, {}, {"U1": "ideal", None: "perfect"})
    assert changed.opamps[0].type == "ideal"
    assert notes == ("U1: op-amp type perfect", "U1: op-amp type ideal")


def test_overrides_that_cannot_be_are_refused() -> None:
    stage = find_stage("inverting-low-pass")
    with pytest.raises(UnknownNameError, match="has no part R9") as caught:
        with_overrides(stage, {"R9": "4k7"}, {})
    assert caught.value.hint == "it has R1, R2, C1, U1"
    with pytest.raises(NotationError, match='R1 = "4z7": no such prefix') as usage:
        with_overrides(stage, {"R1": "4z7"}, {})
    assert usage.value.exit_code == 2
    for text in ("0", "-1k", "1e20"):
        with pytest.raises(PartValueError, match=f'R1 = "{text}"') as value:
            with_overrides(stage, {"R1": text}, {})
        assert value.value.exit_code == 5
    with pytest.raises(UnknownNameError, match=r"U1 .* is an op-amp and has no value"):
        with_overrides(stage, {"U1": "4k7"}, {})
    with pytest.raises(UnknownNameError, match=r"R1 .* is a resistor, not an op-amp"):
        with_overrides(stage, {}, {"R1": "ideal"})
    with pytest.raises(UnknownNameError, match=r"^no op-amp type named TLO72"):
        with_overrides(stage, {}, {None: "TLO72"})


def test_a_new_stage_file_is_a_stage_that_keeps_its_word(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    new_stage_file(path)
    stage = find_stage(str(path))
    assert stage.title == "My low-pass"
    assert len(stage.expects) == 3
    for expect in stage.expects:
        found = evaluate(netlist(stage).with_values(dict(expect.parts)), expect.what)
        assert abs(found - expect.value) <= expect.within * (1.0 if expect.absolute else expect.value)
    drawn = set(re.findall(r"[A-Z]+[0-9]+", stage.drawing))
    assert drawn == {part.designator for part in stage.parts}


def test_a_new_stage_file_raises_no_doubt_and_explains_every_key(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    new_stage_file(path)
    circuit = netlist(find_stage(str(path)))
    for closed in (0.0, 1.0):
        assert list(warnings(circuit.with_values({"S1": closed}))) == []
    text = path.read_text("utf-8")
    part_keys = "kind nodes value tolerance series role adjust dielectric half_voltage ends wiper taper position closed"
    diode_keys = (
        "anode cathode type emission saturation capacitance breakdown breakdown_current breakdown_slope"
    )
    stage_keys = (
        "title about supply temperature outputs drawing what within source output parts opamp plus minus out"
    )
    names = [*part_keys.split(), *diode_keys.split(), *stage_keys.split(), *DIODE_TYPES, *TAPERS]
    names += [name for name in FIGURES if not name.startswith("low_q")]
    assert [name for name in names if not re.search(rf"\b{name}\b", text)] == []


def test_the_parts_it_has_no_use_for_are_parts_too(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    new_stage_file(path)
    spare = re.findall(r"^# ([A-Z][0-9] = \{.*\})$", path.read_text("utf-8"), re.MULTILINE)
    kinds = {
        PartKind(read_part(Table("x", "[parts.X1]", tomllib.loads(line)[line[:2]]), line[:2]).kind)
        for line in spare
    }
    assert kinds == {PartKind.INDUCTOR, PartKind.VOLTAGE, PartKind.DIODE, PartKind.CAPACITOR}
    assert kinds | {part.kind for part in find_stage(str(path)).parts} == set(PartKind)


def test_a_new_stage_file_takes_nothing_away(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text("mine", "utf-8")
    with pytest.raises(OutputFileError, match="there is something of that name") as caught:
        new_stage_file(path)
    assert (path.read_text("utf-8"), caught.value.exit_code) == ("mine", 3)
    with pytest.raises(OutputFileError, match="no such folder"):
        new_stage_file(tmp_path / "none" / "mine.toml")
    with pytest.raises(UsageError, match=r"ends in \.toml"):
        new_stage_file(tmp_path / "mine.txt")
