"""`preview opamps`: types side by side, one with its sources, as text and as JSON."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from preview.circuit import opamp_library
from preview.circuit.opamp_units import FIGURE_FIELDS
from preview.cli import main


@pytest.fixture(autouse=True)
def own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    folder = tmp_path / "opamps"
    folder.mkdir()
    monkeypatch.setattr(opamp_library, "user_opamp_folder", lambda: folder)
    return folder


def run(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str, str]:
    code = main(list(arguments))
    said = capsys.readouterr()
    return code, said.out, said.err


def test_every_type_is_on_a_line_of_the_comparison(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, err = run(capsys, "opamps")
    assert (code, err) == (0, "")
    lines = {line.split()[0]: line for line in out.splitlines()}
    assert set(opamp_library.opamp_names()) < set(lines)
    for cell in ("4 MHz", "13 V/µs", "18 nV/√Hz", "1 V/1 V", "7 to 36 V ", "jfet"):
        assert cell in lines["TL072"]
    assert "phase reversal" in lines["TL072"]
    assert "phase reversal, crossover" in lines["LM358"]
    assert lines["NE5532"].endswith("bipolar")
    assert "6 to 36 V~" in lines["LM741"]  # its sheet gives no smallest supply
    assert "no limit but the rails" in lines["ideal"]


def test_the_comparison_as_json_is_in_si_units(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = run(capsys, "opamps", "--json")
    assert code == 0
    rows = {row["name"]: row for row in json.loads(out)["opamps"]}
    assert rows["OP27"]["slew_up_v_per_s"] == 2.8e6
    assert rows["OP27"]["class"] == "precision"
    assert rows["OP27"]["real"] is True
    assert rows["ideal"]["gain_bandwidth_hz"] is None
    assert rows["ideal"]["class"] is None


def test_some_types_are_compared_figure_by_figure(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, err = run(capsys, "opamps", "tl072", "LM358", "ideal")
    assert (code, err) == (0, "")
    rows = {line[:44].strip(): line[44:].split() for line in out.splitlines()[1:-1]}
    assert out.splitlines()[0].split() == ["TL072", "LM358", "ideal"]
    assert rows["slew rate of a rising output"][:4] == ["13", "V/µs", "0.3", "V/µs"]
    assert rows["open-loop output resistance"][:4] == ["200", "Ω", "300", "Ω~"]
    assert rows["beyond the common-mode range the output"][:2] == ["reverses", "reverses"]
    assert all(row[-2:] == ["no", "limit"] for row in rows.values())
    assert len(rows) == len(FIGURE_FIELDS) + 2
    _, report, _ = run(capsys, "opamps", "tl072", "LM358", "--json")
    assert [row["name"] for row in json.loads(report)["opamps"]] == ["TL072", "LM358"]
    assert run(capsys, "opamps", "TL072", "TLO72")[0] == 5


def test_one_type_is_told_with_its_sources_and_gaps(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = run(capsys, "opamps", "tl082")
    assert code == 0
    given, assumed = out.split("assumed, for the file does not give them:")
    assert "13 V/us" in given
    assert "TI min 8; onsemi typ 13 (read)" in given
    assert "TL08x data sheet curves and ratings, recalled; curve (from memory)" in given
    assert "into 2 kΩ on 15 V and -15 V" in given
    assert "beyond the common-mode range the output" in given
    assert "phase margin at unity gain" in assumed
    assert "open-loop output resistance" in assumed
    assert "class jfet, from memory" in assumed


def test_one_type_as_json_carries_every_source(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = run(capsys, "opamps", "LM358", "--json")
    report = json.loads(out)
    assert code == 0
    assert report["bias_a"] == -45e-9
    assert report["current_limit_a"] == 0.015
    assert set(report["assumed"]) < set(report["sources"])
    assert [row["load_ohm"] for row in report["swings"]] == [10e3, 10e3, 2e3, None]
    assert [row["current_a"] for row in report["swings"]] == [None, None, None, 0.01]
    assert [row["supply_positive_v"] for row in report["swings"][:2]] == [30.0, 5.0]
    assert report["swing_high_points"][-1] == {"current_a": pytest.approx(26.0 / 2e3), "drop_v": 4.0}
    assert (report["current_source_a"], report["current_sink_a"]) == (0.03, 0.015)
    assert (report["input_overdrive"], report["crossover_v"], report["crossover_a"]) == (
        "reverses",
        2.0,
        50e-6,
    )


def test_a_built_in_type_has_no_figures(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = run(capsys, "opamps", "ideal")
    assert code == 0
    assert "built in" in out


def test_an_unknown_type_exits_with_5_and_the_nearest_name(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, err = run(capsys, "opamps", "TLO72")
    assert (code, out) == (5, "")
    assert err.startswith("preview: no op-amp type named TLO72\n  did you mean TL072?")
    assert run(capsys, "response", "--opamp", "TLO72")[0] == 5


def test_a_broken_file_of_ones_own_is_named_and_the_rest_listed(
    capsys: pytest.CaptureFixture[str], own_folder: Path
) -> None:
    (own_folder / "broken.toml").write_text("title = ", "utf-8")
    source = (Path(__file__).parents[2] / "preview/opamps/OP27.toml").read_text("utf-8")
    (own_folder / "Bench-1.toml").write_text(source, "utf-8")
    code, out, err = run(capsys, "opamps")
    assert code == 0
    assert "Bench-1" in out
    assert "broken.toml" in err
    assert len(err.splitlines()) == 1
