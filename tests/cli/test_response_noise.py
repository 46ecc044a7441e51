"""``preview response --noise``: total, densities and contributors, and the rest voltage beside them."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pytest

from preview.circuit.library import find_stage, with_overrides
from preview.circuit.netlist import netlist
from preview.cli import main
from preview.network.noise import OutputNoise
from preview.network.operating import operating_point
from preview.values.levels import dbu_from_vrms, format_volts

CIRCUIT = netlist(with_overrides(find_stage("inverting-low-pass"), {}, {None: "TL072"})[0])


def run(capsys, *words: str) -> str:
    assert main(["response", "--opamp", "TL072", *words]) == 0
    return capsys.readouterr().out


def test_json_has_density_total_band_and_contributors(capsys):
    report = json.loads(run(capsys, "--noise", "--at", "20,1k", "--json"))
    exact = OutputNoise(CIRCUIT)
    np.testing.assert_allclose(report["noise_v_rthz"], exact.spectrum([20.0, 1e3]).output_v_rthz, rtol=1e-12)
    assert report["noise_total_vrms"] == pytest.approx(exact.total().output_vrms, rel=1e-12)
    assert report["noise_band_hz"] == [20.0, 20000.0]
    first = report["contributors"][0]
    assert (first["designator"], first["noise"]) == ("U1", "voltage")
    assert sum(row["power_ratio"] for row in report["contributors"]) == pytest.approx(1.0)


def test_text_has_the_total_the_spot_densities_and_who_makes_it(capsys):
    lines = run(capsys, "--noise", "--at", "1k").splitlines()
    total = OutputNoise(CIRCUIT).total()
    level = f"{format_volts(total.output_vrms)} rms, {dbu_from_vrms(total.output_vrms):.1f} dBu"
    assert any(line.startswith(f"noise 20 Hz to 20 kHz: {level}") for line in lines)
    assert any("1 kHz" in line and line.endswith("nV/√Hz") for line in lines)
    share = total.source_vrms[[s.kind for s in total.sources].index("voltage")] ** 2 / total.output_vrms**2
    assert any("U1 voltage" in line and line.endswith(f"{100 * share:.1f} %") for line in lines)


def test_csv_has_the_density_of_each_frequency(capsys):
    rows = list(csv.DictReader(io.StringIO(run(capsys, "--noise", "--at", "20,1k", "--csv"))))
    assert float(rows[1]["noise_v_rthz"]) == pytest.approx(
        OutputNoise(CIRCUIT).spectrum([1e3]).output_v_rthz[0], rel=1e-9
    )


def test_without_the_option_there_is_no_noise_but_where_the_output_rests(capsys):
    report = json.loads(run(capsys, "--at", "1k", "--json"))
    assert not [key for key in report if "noise" in key]
    assert report["dc_output_v"] == pytest.approx(operating_point(CIRCUIT).volts["out"])
    assert report["dc_limiting"] == {}
    said = f"without a signal {format_volts(report['dc_output_v'])} at the output"
    assert said in run(capsys, "--at", "1k")


def test_noise_does_not_go_with_sections(capsys):
    assert main(["response", "--sections", "--noise"]) == 2
    assert "--noise does not go with --sections" in capsys.readouterr().err
