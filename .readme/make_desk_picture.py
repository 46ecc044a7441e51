"""Make the picture of the desk that the README shows: the demo on the silent clock, once its clips are known.

Run from the top of the repository: ``.venv/bin/python .readme/make_desk_picture.py``
"""

from __future__ import annotations

import time
from pathlib import Path

from preview.audio.files import probe
from preview.circuit.library import find_stage, with_overrides
from preview.engine.demo import demo_recording
from preview.engine.messages import ClipMarks, Overview
from preview.engine.process import EngineConfig, EngineProcess
from preview.session import Session
from preview.ui.picture import desk_svg
from preview.values.levels import parse_full_scale

HERE = Path(__file__).parent


def main() -> None:
    """Write ``desk.svg`` beside this file."""
    demo = demo_recording()
    stage, _ = with_overrides(find_stage("inverting-low-pass"), {"C1": "680p"}, {})
    session = Session(
        audio=demo.path,
        stage=stage,
        supply=stage.supply,
        full_scale=parse_full_scale("+18 dBu"),
    )
    probe(demo.path)
    engine = EngineProcess.start(EngineConfig(session=session, silent=True, play=True))
    try:
        snapshot, reports = None, {}
        until_s = time.monotonic() + 120.0
        while time.monotonic() < until_s:
            reports |= {type(report): report for report in engine.reports()}
            marks = reports.get(ClipMarks)
            looked = Overview in reports and marks is not None and marks.done_frames == marks.frames
            snapshot = engine.latest() or snapshot
            known = looked and snapshot is not None and snapshot.spectrum is not None
            if known and 1.2 < snapshot.position_frame / snapshot.sample_rate_hz < 1.6:
                break
            time.sleep(0.01)
    finally:
        engine.close()
    picture = desk_svg(session, snapshot=snapshot, reports=tuple(reports.values()))
    (HERE / "desk.svg").write_text(picture, encoding="utf-8")


if __name__ == "__main__":
    main()
