"""The timeline: waveform, clip marks, playhead, region; from clip to clip; the mouse."""

from __future__ import annotations

from dataclasses import replace

import pytest

from preview.engine.messages import ClipMarks, InputKind, OpAmpMarks, Overview, Seek, SetRegion
from preview.ui.app import DeskApp
from preview.ui.clips import clips_of
from preview.ui.desk import Desk
from preview.ui.panels.timeline import TimelinePanel, WaveformPanel
from preview.ui.theme import Look

RATE_HZ = 48_000
FRAMES = 600_000


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


def marks(*spans: tuple[str, int, int], done: int = FRAMES) -> ClipMarks:
    names = sorted({name for name, _, _ in spans} | {"U1"})
    opamps = [OpAmpMarks(name, tuple((a, b) for n, a, b in spans if n == name)) for name in names]
    return ClipMarks("A", FRAMES, done, tuple(opamps))


THREE = marks(("U1", 48_000, 48_480), ("U1", 240_000, 244_800), ("U1", 480_000, 480_240))
"""At 1 s, 5 s and 10 s."""
HALF_LOUD = Overview(FRAMES, 2000, (-0.1,) * 1000 + (-0.8,) * 1000, (0.1,) * 1000 + (0.8,) * 1000)


class Clock:
    """A clock that is set by hand."""

    now_s = 100.0

    def __call__(self) -> float:
        return self.now_s


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture
def desk(session, engine, clock) -> Desk:
    desk = Desk(session, engine, now_s=clock)
    desk.take(engine.snapshot)
    return desk


# ---- from clip to clip ----


def test_clips_of_all_op_amps_are_in_the_order_of_time() -> None:
    found = clips_of(marks(("U2", 5, 9), ("U1", 100, 200), ("U1", 1, 3)))
    assert [(clip.designator, clip.start) for clip in found] == [("U1", 1), ("U2", 5), ("U1", 100)]
    assert clips_of(None) == []


def test_next_goes_to_a_tenth_of_a_second_before_each_clip(desk, engine) -> None:
    desk.hear_report(THREE)
    said = [desk.method("next_clip")() for _ in range(4)]
    assert engine.sent == [Seek(43_200), Seek(235_200), Seek(475_200)]
    assert said[0] == "clip 1 of 3: U1 at 0:01.0 for 10 ms"
    assert said[3] == "no clip after this one"


def test_previous_goes_back_clip_by_clip(desk, engine) -> None:
    desk.hear_report(THREE)
    desk.listening.seek(500_000)
    said = [desk.method("previous_clip")() for _ in range(4)]
    assert engine.sent[1:] == [Seek(475_200), Seek(235_200), Seek(43_200)]
    assert said[3] == "no clip before this one"


def test_next_counts_from_the_playhead_once_it_has_been_moved(desk, engine, clock) -> None:
    desk.hear_report(THREE)
    desk.method("next_clip")()
    desk.listening.seek(300_000)
    clock.now_s += 1.0
    desk.take(replace(engine.snapshot, position_frame=300_000))
    desk.method("next_clip")()
    assert engine.sent[-1] == Seek(475_200)


def test_while_a_clip_plays_next_is_the_one_after_it(desk, engine, clock) -> None:
    desk.hear_report(THREE)
    desk.method("next_clip")()
    clock.now_s += 1.0
    desk.take(replace(engine.snapshot, position_frame=48_100))
    desk.method("next_clip")()
    assert engine.sent[-1] == Seek(235_200)


def test_the_clip_at_the_playhead_is_looped_with_a_little_around_it(desk, engine) -> None:
    desk.hear_report(THREE)
    desk.listening.seek(236_000)
    said = desk.method("loop_clip")()
    # 240000 to 244800 and a quarter of a second on each side
    assert engine.sent[-2:] == [SetRegion(228_000, 256_800), Seek(228_000)]
    assert said.startswith("U1 at 0:05.0 for 100 ms; region 0:04.7 to 0:05.3")
    assert desk.listening.region == (228_000, 256_800)


def test_a_clip_at_the_very_start_or_end_is_looped_within_the_recording(desk, engine) -> None:
    desk.hear_report(marks(("U1", 0, 10), ("U1", FRAMES - 10, FRAMES)))
    desk.method("loop_clip")()
    assert engine.sent[-2] == SetRegion(0, 12_010)
    desk.listening.seek(FRAMES)
    desk.method("loop_clip")()
    assert engine.sent[-2] == SetRegion(FRAMES - 12_010, FRAMES)


def test_only_clips_of_the_selected_op_amp_are_visited(two_opamps, engine) -> None:
    desk = two_opamps
    desk.hear_report(marks(("U1", 48_000, 48_480), ("U2", 96_000, 96_480)))
    desk.view.opamp = "U2"
    assert "U2 at 0:02.0" in desk.method("next_clip")()
    assert desk.method("next_clip")() == "no clip after this one"


def test_what_is_not_known_yet_is_said(desk, engine) -> None:
    for name in ("next_clip", "previous_clip", "loop_clip"):
        assert desk.method(name)() == "the recording has not been looked through yet"
    desk.hear_report(marks(done=150_000))
    assert desk.method("next_clip")() == "looking through the recording: 25 %"
    desk.hear_report(marks())
    assert desk.method("next_clip")() == "nothing clips in this recording"
    assert engine.sent == []


# ---- what is drawn ----


def _strip(desk: Desk, width: int = 80, height: int = 1) -> list[str]:
    return [text_of(r) for r in TimelinePanel(desk, Look()).rows(width, height)]


def test_one_row_has_waveform_clips_playhead_region_and_times(desk) -> None:
    desk.hear_report(HALF_LOUD)
    desk.hear_report(THREE)
    desk.listening.seek(300_000)
    desk.method("region_start")()
    (line,) = _strip(desk)
    assert len(line) == 80
    assert line.startswith(" 0:06.2 ")
    assert "region 0:06.2 to 0:12.5" in line
    assert 3 <= line.count("×") <= 4
    assert line.index("▂") < line.index("◆") < line.index("█") < line.index(")")


def test_more_rows_have_the_waveform_above_the_line(desk) -> None:
    desk.hear_report(HALF_LOUD)
    desk.hear_report(THREE)
    two, three = _strip(desk, height=2), _strip(desk, height=3)
    assert "█" in two[0]
    assert "◆" in two[1]
    assert sum(0x2800 < ord(ch) < 0x2900 for ch in three[0]) > 20
    assert 3 <= three[1].count("×") <= 4
    assert all(len(line) <= 80 for line in (*two, *three))


def test_the_loudest_moment_fills_the_height_whatever_its_level(desk) -> None:
    quiet = Overview(FRAMES, 100, (-0.01,) * 100, (0.01,) * 100)
    desk.hear_report(quiet)
    assert "█" in _strip(desk)[0]
    desk.hear_report(Overview(FRAMES, 100, (0.0,) * 100, (0.0,) * 100))
    assert "█" not in _strip(desk)[0], "silence is a line"


def test_an_overview_that_is_not_done_is_drawn_as_far_as_it_goes(desk) -> None:
    desk.hear_report(Overview(FRAMES, 2000, (-0.5,) * 500, (0.5,) * 500))
    (line,) = _strip(desk)
    assert "─" in line
    drawn = [x for x, ch in enumerate(line) if ch == "█"]
    start = line.index("█")
    assert 0.2 < (max(drawn) - start) / (len(line) - start - 9) < 0.3
    assert "building the overview: 25 %" in text_of(WaveformPanel(desk, Look()).rows(80, 12)[0])


def test_an_endless_signal_has_a_name_and_no_line(desk, engine) -> None:
    desk.take(replace(engine.snapshot, frames=0, input_kind=InputKind.SIGNAL, input_name="sine 1 kHz 1 V"))
    assert "sine 1 kHz 1 V" in _strip(desk)[0]
    assert "no recording" in text_of(WaveformPanel(desk, Look()).rows(60, 8)[1])


def test_the_view_has_a_row_of_marks_for_each_op_amp_and_lists_the_clips(two_opamps) -> None:
    desk = two_opamps
    desk.hear_report(HALF_LOUD)
    desk.hear_report(marks(("U1", 48_000, 48_480), ("U2", 300_000, 420_000)))
    lines = [text_of(r) for r in WaveformPanel(desk, Look()).rows(60, 14)]
    assert "2 clips" in lines[0]
    first, second = (next(line for line in lines if line.startswith(f" {name} ")) for name in ("U1", "U2"))
    assert first.count("×") == 1
    # 2.5 s of 12.5 s are a fifth of the 55 cells
    assert 11 <= second.count("×") <= 12
    assert any("2  U2 at 0:06.2 for 2.50 s" in line for line in lines)


@pytest.mark.parametrize("width", [20, 44, 58, 110])
@pytest.mark.parametrize("height", [2, 4, 8, 16])
def test_the_view_fits(two_opamps, width, height) -> None:
    desk = two_opamps
    desk.hear_report(HALF_LOUD)
    spans = [(name, n * 6000, n * 6000 + 100) for n in range(90) for name in ("U1", "U2")]
    desk.hear_report(marks(*spans))
    lines = [text_of(r) for r in WaveformPanel(desk, Look()).rows(width, height)]
    assert len(lines) <= height
    assert all(len(line) <= max(width, 36) for line in lines)


def test_marks_from_before_a_change_are_drawn_but_not_reckoned_with(desk) -> None:
    desk.hear_report(THREE)
    assert not desk.marks_old
    desk.parts.set(22e3)
    assert desk.marks_old
    assert "×" in _strip(desk)[0]
    desk.hear_report(THREE)
    assert not desk.marks_old


# ---- the mouse ----


async def test_a_click_seeks_and_a_drag_sets_the_region(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        await pilot.click("#timeline", offset=(40, 0))
        await pilot.pause()
        assert 200_000 < app.desk.listening.position_frame < 400_000
        await pilot.mouse_down("#timeline", offset=(20, 0))
        await pilot.mouse_up("#timeline", offset=(50, 0))
        await pilot.pause()
        command = engine.sent[-1]
        assert isinstance(command, SetRegion)
        assert 0 < command.start_frame < 200_000 < command.end_frame < 500_000
        await pilot.mouse_down("#timeline", offset=(60, 0))
        await pilot.mouse_up("#timeline", offset=(30, 0))
        await pilot.pause()
        assert engine.sent[-1].start_frame < engine.sent[-1].end_frame, "backwards is as good"
