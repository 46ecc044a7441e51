"""Every view in three sizes as SVG, whole and legible; a few of them kept as golden files, which are no truth.

``PREVIEW_WRITE_GOLDEN=1`` writes the golden files anew; look at them before they are kept.
"""

from __future__ import annotations

import asyncio
import os
import re
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from preview.circuit.opamp import OpAmpReading
from preview.engine.messages import (
    CandidateReading,
    ClipMarks,
    OpAmpMarks,
    Overview,
    Report,
    Snapshot,
    SpectrumReading,
)
from preview.meters.reading import LevelReading
from preview.session import Session
from preview.ui.app import DeskApp
from preview.ui.figures import FigureJob, Figures
from preview.ui.link import StillLink
from preview.ui.opamps import with_opamp_type
from preview.ui.picture import desk_svg
from preview.ui.view import Shown

pytestmark = pytest.mark.slow


GOLDEN = Path(__file__).parent / "golden"
SIZES = ((80, 24), (100, 30), (160, 48))
KEPT = {
    (Shown.RESPONSE, (80, 24)),
    (Shown.OPAMPS, (100, 30)),
    (Shown.CANDIDATES, (80, 24)),
    (Shown.TIMELINE, (160, 48)),
}
SAYS = {
    Shown.RESPONSE: ("response", "1.59 kHz", "100k"),
    Shown.CIRCUIT: ("circuit", "R1 10k", "U1 TL072"),
    Shown.OPAMPS: ("op-amps", "swing clips 41 times", "needs 2.10 V more supply or 1.2 dB less gain"),
    Shown.CANDIDATES: ("candidates", "loudness", "-18.2 LUFS"),
    Shown.TIMELINE: ("timeline", "1 U1 at 0:01.0", "2 clips"),
}
"""What must be readable in each view."""
SVG = "{http://www.w3.org/2000/svg}"


def figures(job: FigureJob) -> Figures:
    """A low-pass in closed form, with all that a view can show."""
    frequency_hz = np.geomspace(1.0, 1e6, 121)
    response = -10.0 / (1.0 + 1j * frequency_hz / 1591.549)
    gain_db = 20.0 * np.log10(np.abs(response))
    return Figures(
        frequency_hz=frequency_hz,
        gain_db=gain_db,
        phase_deg=np.degrees(np.angle(response)),
        heard_db=np.where(frequency_hz < 21.6e3, gain_db, np.nan),
        noise_v_rthz=np.full(121, 1e-7),
        noise_vrms=14.1e-6,
        corners_hz=(1591.549,),
        passband_gain_db=20.0,
        error_db=0.0004,
        sample_rate_hz=job.sample_rate_hz,
        speed_db=0.02,
        rest_v={"in": 0.0, "sum": 0.003, "out": 0.033},
        offset_v={"in": 0.0, "sum": 0.003, "out": 0.033},
    )


@pytest.fixture
def clipping(session) -> Session:
    return with_opamp_type(session, "TL072")[0]


@pytest.fixture
def snapshot(engine) -> Snapshot:
    center_hz = tuple(1000.0 * 10.0 ** (0.3 * (2 * n + 1) / 12.0) for n in range(-34, 26))
    out = tuple(0.5 / (1.0 + abs(n - 25)) for n in range(60))
    assert engine.snapshot is not None
    return replace(
        engine.snapshot,
        playing=True,
        position_frame=240_000,
        input=LevelReading((0.9, 0.7), (1.61, 1.4), (0.31, 0.28)),
        output=LevelReading((9.0, 7.0), (14.0, 12.0), (3.1, 2.8)),
        opamps=(OpAmpReading("U1", 14.0, 14.0, -13.2, 0.0, 41, 0.034, 1.9e6, 13e6, 1.4e-3, 25e-3),),
        opamp_peaks_v=(9.0,),
        spectrum=SpectrumReading(center_hz, tuple(v / 10.0 for v in out), out),
        candidates=(CandidateReading("A", True, -18.2, 0.0),),
    )


@pytest.fixture
def reports() -> tuple[Report, ...]:
    shape = np.abs(np.sin(np.linspace(0.0, 9.0, 400))) * np.linspace(0.1, 0.18, 400)
    overview = Overview(600_000, 400, tuple((-shape).tolist()), tuple(shape.tolist()))
    spans = ((48_000, 48_480), (300_000, 312_000))
    marks = ClipMarks("A", 600_000, 600_000, (OpAmpMarks("U1", spans, 16.1, -15.2, 2e6),))
    return overview, marks


def texts_of(svg: str) -> str:
    return " ".join(node.text or "" for node in ElementTree.fromstring(svg).iter(f"{SVG}text"))


@pytest.mark.parametrize("size", SIZES, ids=lambda size: f"{size[0]}x{size[1]}")
@pytest.mark.parametrize("shown", Shown, ids=lambda shown: shown.value)
async def test_every_view_is_whole_in_three_sizes(clipping, snapshot, reports, shown, size) -> None:
    svg = await asyncio.to_thread(
        desk_svg, clipping, snapshot=snapshot, reports=reports, shown=shown, size=size, make_figures=figures
    )
    text = " ".join(texts_of(svg).split())
    for words in SAYS[shown]:
        assert words in text, words
    for words in ("announcement.wav", "Inverting low-pass", "CLIPS", "corner 1.59 kHz", "? help"):
        assert words in text or words.replace("? help", "help") in text, words
    assert "cannot be drawn" not in text
    width = float(re.search(r'viewBox="0 0 (\S+)', svg)[1])
    for node in ElementTree.fromstring(svg).iter(f"{SVG}text"):
        assert float(node.get("x")) + float(node.get("textLength")) <= width, f"over the edge: {node.text}"
    if (shown, size) in KEPT:
        golden = GOLDEN / f"{shown.value}-{size[0]}x{size[1]}.svg"
        if os.environ.get("PREVIEW_WRITE_GOLDEN") == "1":
            golden.write_text(svg, encoding="utf-8")
        assert svg == golden.read_text(encoding="utf-8"), "the picture has changed: look at it"


@pytest.mark.parametrize("size", SIZES, ids=lambda size: f"{size[0]}x{size[1]}")
@pytest.mark.parametrize("shown", Shown, ids=lambda shown: shown.value)
async def test_without_colours_every_view_is_grey_and_says_the_same(
    clipping, snapshot, reports, monkeypatch, shown, size
) -> None:
    monkeypatch.setenv("NO_COLOR", "1")
    app = DeskApp(
        clipping, StillLink(snapshot, reports), autoplay=False, show_caution=False, make_figures=figures
    )
    async with app.run_test(size=size) as pilot:
        app.desk.view.show(shown)
        while app.desk.figures.now is None:
            await pilot.pause(0.01)
        app.show()
        await pilot.pause(0.3)
        svg = app.export_screenshot(simplify=True)
    frame = "#c5c8c6"  # the title that the library puts around a screenshot
    used = set(re.findall(r"fill: (#[0-9a-f]{6})", svg)) - {frame}
    assert len(used) > 1
    assert all(c[1:3] == c[3:5] == c[5:7] for c in used), f"not grey: {used}"
    text = re.sub(r"<[^>]+>", " ", svg).replace("&#160;", " ")
    text = " ".join(text.split())
    for words in SAYS[shown][:1]:
        assert words in text


def test_the_golden_files_are_few_and_small() -> None:
    files = list(GOLDEN.glob("*.svg"))
    assert {file.stem for file in files} == {f"{shown.value}-{w}x{h}" for shown, (w, h) in KEPT}
    assert sum(file.stat().st_size for file in files) < 200_000
