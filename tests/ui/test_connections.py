"""Input, output, device, mute, export, and what is on the desk as a file."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from preview.circuit.library import find_stage
from preview.circuit.parts import Supply
from preview.engine import autosave
from preview.engine.messages import (
    CancelExport,
    DeviceList,
    DeviceRow,
    DropCandidate,
    Export,
    ExportState,
    FaultReading,
    InputKind,
    KeepCandidate,
    OpAmpMarks,
    OpenFile,
    Overview,
    Recover,
    RescanDevices,
    Seek,
    SelectCandidate,
    SetCircuit,
    SetDevice,
    SetFullScale,
    SetHeardChannels,
    SetMute,
    SetVolume,
    UseLive,
    UseSignal,
)
from preview.errors import AudioFileError, NotationError, OutputFileError, SessionFileError, UsageError
from preview.ui.asking import Menu, Question
from preview.ui.desk import Desk
from preview.ui.panels.header import HeaderPanel
from preview.ui.theme import Look
from preview.values.stimulus import Waveform, parse_stimulus

DEMO = Path(__file__).parents[2] / "demo_audio" / "announcement.flac"


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


def head(desk: Desk, width: int = 120) -> list[str]:
    return [text_of(r) for r in HeaderPanel(desk, Look()).rows(width, 3)]


# ---- input ----


def test_another_recording_is_the_sessions_once_the_engine_has_it(desk, engine, tmp_path) -> None:
    file = tmp_path / "bells.wav"
    file.touch()
    desk.hear_report(Overview(600_000, 1, (-1.0,), (1.0,)))
    question = desk.method("input")().take("\0file")
    assert isinstance(question, Question)
    with pytest.raises(AudioFileError, match="no such file"):
        question.understand(str(tmp_path / "no.wav"))
    with pytest.raises(AudioFileError, match="a folder"):
        question.understand(str(tmp_path))
    question.take(str(file))
    assert engine.sent[-1] == OpenFile(file)
    desk.take(replace(engine.snapshot, input_name="announcement.wav"))
    assert desk.session.audio == Path("announcement.wav"), "it may not be opened at all"
    desk.take(replace(engine.snapshot, input_name="bells.wav"))
    assert desk.session.audio == file
    assert desk.overview is None, "the waveform is of the recording before"
    assert "bells.wav" in head(desk)[0]


def test_a_test_signal_is_typed_in_volts(desk, engine) -> None:
    menu = desk.method("input")()
    assert [choice.answer for choice in menu.choices[1:-1]] == list(Waveform)
    question = menu.take(Waveform.SINE)
    assert "sine 1k 1V" in question.about
    with pytest.raises(NotationError):
        question.understand("sine 1k")
    question.take("sine 440 0.5V")
    stimulus = parse_stimulus("sine 440 0.5V")
    assert engine.sent[-1] == UseSignal(stimulus)
    desk.take(replace(engine.snapshot, input_kind=InputKind.SIGNAL, input_name=stimulus.text, frames=0))
    assert desk.session.stimulus == stimulus
    assert desk.session.audio is None
    assert stimulus.text in head(desk)[0]


def test_live_input_begins_muted_and_says_its_latency(desk, engine) -> None:
    said = desk.method("input")().take("\0live")
    assert "begins muted" in said
    assert engine.sent[-1] == UseLive(None)
    desk.take(
        replace(
            engine.snapshot,
            input_kind=InputKind.LIVE,
            input_name="card",
            frames=0,
            live_latency_s=0.0231,
            muted=True,
            mute_reason="live input",
        )
    )
    assert desk.session.live
    lines = head(desk)
    assert "live input card" in lines[0]
    assert "23 ms in to out" in lines[0]
    assert "MUTED: live input" in lines[2]
    assert desk.method("mute")() == "heard again"
    assert engine.sent[-1] == SetMute(False)


def test_every_candidate_hears_the_same_input(desk, engine) -> None:
    desk.method("candidate_keep")()
    desk.method("input")().take(Waveform.PINK).take("pink 0.5Vrms")
    desk.take(replace(engine.snapshot, input_kind=InputKind.SIGNAL, input_name="pink"))
    desk.candidates.hear("A")
    assert desk.session.stimulus is not None
    assert desk.session.audio is None


# ---- mute, output, channels, device ----


def test_mute_is_told_in_capitals_and_why(desk, engine) -> None:
    assert desk.method("mute")().startswith("muted")
    assert engine.sent[-1] == SetMute(True)
    desk.take(replace(engine.snapshot, muted=True, mute_reason="howl-round at 812 Hz"))
    assert "MUTED: howl-round at 812 Hz" in head(desk)[2]


def test_a_circuit_that_was_muted_starts_from_rest_by_the_same_key(desk, engine) -> None:
    desk.take(replace(engine.snapshot, fault=FaultReading("out", 1.5, "the computation ran away")))
    assert "MUTED: the computation ran away at out. Press R" in head(desk)[2]
    assert desk.method("mute")() == "the circuit starts from rest"
    assert engine.sent[-1] == Recover()


def test_another_output_of_the_stage_can_be_listened_to(session, engine) -> None:
    desk = Desk(session.with_stage(find_stage("state-variable")), engine)
    menu = desk.method("output")()
    assert isinstance(menu, Menu)
    assert [choice.answer for choice in menu.choices] == ["out", *desk.session.stage.outputs]
    menu.take(desk.session.stage.outputs[0])
    assert isinstance(engine.sent[-1], SetCircuit)
    assert engine.sent[-1].netlist.output_node == desk.session.stage.outputs[0]
    desk.method("undo")()
    assert desk.session.output == "out"


def test_of_many_channels_a_pair_is_chosen(desk, engine) -> None:
    desk.take(replace(engine.snapshot, channels=5, heard_channels=(0, 1)))
    menu = desk.method("channels")()
    assert [choice.label for choice in menu.choices] == [
        "channels 1 and 2",
        "channels 3 and 4",
        "channels 5 and 5",
    ]
    assert menu.now == "0 1"
    menu.take("2 3")
    assert engine.sent[-1] == SetHeardChannels((2, 3))


def test_devices_are_looked_for_and_chosen_by_name(desk, engine) -> None:
    assert desk.method("device")() == "looking for sound devices"
    assert engine.sent[-1] == RescanDevices()
    rows = (
        DeviceRow("card", "ALSA", 2, 2, 48e3, True, True),
        DeviceRow("microphone", "ALSA", 1, 0, 48e3, False, False),
    )
    assert desk.hear_report(DeviceList(rows)) == "1 output devices; J chooses one"
    menu = desk.method("device")()
    assert [choice.answer for choice in menu.choices[1:]] == ["card"], "one that cannot play is not offered"
    assert menu.choices[1].about == "ALSA, 2 channels, 48 kHz, default"
    menu.take("card")
    assert engine.sent[-1] == SetDevice("card")
    menu.take(menu.choices[0].answer)
    assert engine.sent[-1] == SetDevice(None)
    assert desk.hear_report(DeviceList((), "PortAudio is not installed")) == "PortAudio is not installed"


# ---- export ----


def test_what_is_heard_is_exported_with_progress(desk, engine, tmp_path) -> None:
    desk.parts.set(22e3)
    desk.listening.seek(96_000)
    desk.method("region_start")()
    question = desk.method("export")()
    assert question.understand(f"{tmp_path}/out.wav 24").startswith("the region to ")
    question.take(f"{tmp_path}/out.wav 24")
    order = engine.sent[-1]
    assert isinstance(order, Export)
    assert (order.out, order.depth, order.region) == (tmp_path / "out.wav", "24", (96_000, 600_000))
    assert order.session.stage.part("R1").value == 22e3
    assert desk.hear_report(ExportState("out.wav", 150, 600, "running")) is None
    assert "exporting 25 %" in head(desk)[2]
    assert "stopped" in desk.method("export")()
    assert engine.sent[-1] == CancelExport()
    assert (
        desk.hear_report(ExportState("out.wav", 600, 600, "done", "wrote out.wav")) == "done: wrote out.wav"
    )
    assert "exporting" not in head(desk)[2]


def test_live_input_is_recorded_until_it_is_told_to_end(session, engine, tmp_path) -> None:
    desk = Desk(replace(session, audio=None, live=True), engine)
    desk.take(engine.snapshot)
    question = desk.method("export")()
    assert question.title == "Record what the stage puts out to"
    assert question.understand(f"{tmp_path}/out.wav").startswith("from now on, half an hour at most, to ")
    assert question.take(f"{tmp_path}/out.wav") == "recording to out.wav; W ends it"
    assert isinstance(engine.sent[-1], Export)
    desk.hear_report(ExportState("out.wav", 0, 0, "running"))
    assert "recording 0:00.0" in head(desk)[2]
    desk.hear_report(ExportState("out.wav", 600_000, 0, "running"))
    assert "recording 0:12.5" in head(desk)[2]
    assert desk.method("export")() == "the recording ends"
    assert engine.sent[-1] == CancelExport()
    said = desk.hear_report(ExportState("out.wav", 624_000, 624_000, "done", "out.wav: 13.00 s recorded"))
    assert said == "done: out.wav: 13.00 s recorded"
    assert "recording" not in head(desk)[2]


def test_a_recording_has_ended_where_its_engine_has(session, engine) -> None:
    desk = Desk(replace(session, audio=None, live=True), engine)
    desk.take(engine.snapshot)
    desk.hear_report(ExportState("out.wav", 600_000, 0, "running"))
    assert desk.resume(engine, desk.as_left()) == "what was being written to a file is lost"
    assert "recording" not in head(desk)[2]
    assert desk.resume(engine, desk.as_left()) == ""


@pytest.mark.parametrize("whole", [False, True], ids=["killed", "ended in order"])
def test_what_was_recorded_until_the_engine_ended_is_kept(session, engine, tmp_path, whole) -> None:
    out, hidden = tmp_path / "out.wav", tmp_path / ".out.wav.part"
    (out if whole else hidden).write_text("what there is")
    desk = Desk(replace(session, audio=None, live=True), engine)
    desk.take(engine.snapshot)
    desk.hear_report(ExportState(str(out), 600_000, 0, "running", hidden=str(hidden), readable=True))
    assert desk.resume(engine, desk.as_left()) == f"what was recorded until then is in {out}"
    assert [path.name for path in tmp_path.iterdir()] == ["out.wav"]
    assert out.read_text() == "what there is"


def test_what_cannot_be_read_is_taken_away(session, engine, tmp_path) -> None:
    hidden = tmp_path / ".out.flac.part"
    hidden.write_text("half of it")
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    desk.hear_report(ExportState(str(tmp_path / "out.flac"), 5, 10, "running", hidden=str(hidden)))
    assert desk.resume(engine, desk.as_left()) == "what was being written to a file is lost"
    assert not hidden.exists()


def test_what_was_recorded_and_cannot_be_moved_is_named(session, engine, tmp_path) -> None:
    desk = Desk(replace(session, audio=None, live=True), engine)
    desk.take(engine.snapshot)
    hidden = tmp_path / ".out.wav.part"
    desk.hear_report(
        ExportState(str(tmp_path / "out.wav"), 1, 0, "running", hidden=str(hidden), readable=True)
    )
    said = desk.resume(engine, desk.as_left())
    assert said == f"what was recorded is in {hidden}: No such file or directory"


@pytest.mark.parametrize(
    ("name", "error", "message"),
    [
        ("out", UsageError, "no ending"),
        ("nowhere/out.wav", OutputFileError, "no such folder"),
        ("in.wav", OutputFileError, "the recording itself"),
    ],
)
def test_an_export_that_cannot_work_is_refused_in_place(
    session, engine, tmp_path, name, error, message
) -> None:
    (tmp_path / "in.wav").touch()
    desk = Desk(replace(session, audio=tmp_path / "in.wav"), engine)
    with pytest.raises(error, match=message):
        desk.method("export")().understand(str(tmp_path / name))


# ---- session files ----


@pytest.fixture
def kept(session, engine) -> Desk:
    """Two candidates of a real recording, the second one heard."""
    desk = Desk(replace(session, audio=DEMO), engine)
    desk.take(engine.snapshot)
    desk.parts.set(22e3)
    desk.method("candidate_keep")()
    desk.change(replace(desk.session, supply=Supply(9.0, -9.0)))
    desk.method("candidate_rename")().take("on batteries")
    desk.method("match")()
    desk.method("full_scale")().take("5 V")
    desk.listening.seek(96_000)
    desk.method("region_start")()
    return desk


def test_a_saved_session_opens_as_it_was_on_another_desk(kept, session, engine, tmp_path) -> None:
    question = kept.method("save_session")()
    assert question.take(str(tmp_path / "mine")) == "saved in mine.session.toml"
    assert "replaces the file" in question.understand(str(tmp_path / "mine"))
    other = type(engine)()
    desk = Desk(session, other)
    desk.take(other.snapshot)
    desk.method("candidate_keep")()
    desk.method("candidate_keep")()
    sent = len(other.sent)
    ask = desk.method("open_session")()
    assert ask.understand(str(tmp_path / "mine.session.toml")) == "Inverting low-pass, 2 candidates"
    assert ask.take(str(tmp_path / "mine.session.toml")) == "opened: 2 candidates, B is heard"
    assert desk.candidates.letters == ("A", "B")
    assert desk.candidates.title("B") == "B, on batteries"
    assert desk.session.supply == Supply(9.0, -9.0)
    assert desk.candidates.session("A").stage.part("R1").value == 22e3
    orders = other.sent[sent:]
    assert {c.letter for c in orders if isinstance(c, KeepCandidate)} == {"A", "B"}
    for command in (
        SelectCandidate("B"),
        DropCandidate("C"),
        SetFullScale(5.0),
        OpenFile(DEMO),
        Seek(96_000),
    ):
        assert command in orders, command
    assert desk.listening.region == (96_000, 600_000)
    assert desk.candidates.matched
    desk.take(replace(other.snapshot, input_name=DEMO.name))
    assert desk.session.audio == DEMO


def test_opening_never_turns_the_volume_up(kept, session, engine, tmp_path) -> None:
    kept.method("save_session")().take(str(tmp_path / "mine"))
    other = type(engine)()
    desk = Desk(session, other)
    desk.take(other.snapshot)
    for _ in range(10):
        desk.method("volume_down")()
    desk.method("open_session")().take(str(tmp_path / "mine.session.toml"))
    assert desk.listening.volume_db == -30.0
    assert not any(isinstance(c, SetVolume) and c.volume_db > -30.0 for c in other.sent[10:])


def test_a_file_that_is_no_session_says_so(desk, tmp_path) -> None:
    (tmp_path / "x.toml").write_text("format = 99", "utf-8")
    with pytest.raises(SessionFileError, match="format"):
        desk.method("open_session")().understand(str(tmp_path / "x.toml"))
    with pytest.raises(OutputFileError, match="no such folder"):
        desk.method("save_session")().understand(str(tmp_path / "no" / "x"))


def test_what_a_crash_left_is_offered_and_opened(kept, session, engine, tmp_path, monkeypatch) -> None:
    monkeypatch.setattr(autosave, "autosave_folder", lambda: tmp_path)
    kept.keeping.begin()
    kept.keeping.note()
    kept.keeping.end(keep=True)  # as a crash leaves it: the file, and nobody who holds its lock
    other = type(engine)()
    desk = Desk(session, other)
    desk.take(other.snapshot)
    assert "left behind by a crash or a closed terminal; A opens it" in desk.keeping.begin()
    menu = desk.method("open_session")()
    assert isinstance(menu, Menu)
    assert "announcement.flac, Inverting low-pass, 2 candidates" in menu.choices[0].about
    assert menu.take("0").startswith("opened: 2 candidates")
    assert desk.session.supply == Supply(9.0, -9.0)
    desk.keeping.end()
    assert not list(tmp_path.glob("*.session.toml")), "opened and left in order: nothing remains"


def test_a_desk_that_is_left_in_order_leaves_nothing_behind(kept, tmp_path, monkeypatch) -> None:
    monkeypatch.setattr(autosave, "autosave_folder", lambda: tmp_path)
    assert kept.keeping.begin() == ""
    kept.keeping.note()
    kept.keeping.end()
    assert list(tmp_path.iterdir()) == []


def test_marks_are_not_part_of_a_session(kept) -> None:
    saved = kept.keeping.saved()
    assert saved.letter == "B"
    assert [one.letter for one in saved.candidates] == ["A", "B"]
    assert not any(isinstance(one, OpAmpMarks) for one in saved.candidates)
    assert all(one.session.full_scale.text == "5 V peak" for one in saved.candidates), "common to all"
