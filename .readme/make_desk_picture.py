"""Make the picture of the desk that the README shows: the demo, played on the silent clock for five seconds.

Run from the top of the repository: ``.venv/bin/python .readme/make_desk_picture.py``
"""

from __future__ import annotations

import time
from pathlib import Path

from preview.audio.files import probe
from preview.circuit.library import find_stage, with_overrides
from preview.engine.demo import demo_recording
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
        snapshot = None
        until_s = time.monotonic() + 30.0
        while time.monotonic() < until_s:
            snapshot = engine.latest() or snapshot
            if snapshot is not None and snapshot.position_frame > 1.2 * snapshot.sample_rate_hz:
                break
            time.sleep(0.01)
    finally:
        engine.close()
    (HERE / "desk.svg").write_text(desk_svg(session, snapshot=snapshot), encoding="utf-8")


if __name__ == "__main__":
    main()
