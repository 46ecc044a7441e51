"""The line mode: every action in words, views as sentences, questions and menus as prompts."""

from __future__ import annotations

import io
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import pytest

from preview.engine.messages import (
    CandidateReading,
    ClipMarks,
    KeepCandidate,
    Notice,
    OpAmpMarks,
    Play,
    Seek,
    SelectCandidate,
    SetBypass,
    SetCircuit,
    SetPart,
    SetVolume,
)
from preview.errors import DeviceError, UsageError
from preview.meters.reading import LevelReading
from preview.ui.keymap import KeyMap
from preview.ui.phrases import understood
from preview.ui.plain import PlainDesk

DEMO = Path(__file__).parents[2] / "demo_audio" / "announcement.flac"


class Talk:
    """A line desk on the pretended engine: what is typed, and what is said to it."""

    def __init__(self, session, engine, folder: Path, figures) -> None:
        self.out = io.StringIO()
        self.desk = PlainDesk(
            session, engine, lines=io.StringIO(""), out=self.out, make_figures=figures, config=folder
        )
        assert self.desk._typed.get(timeout=10) is None, "nothing is typed by itself"
        self.desk.poll()

    def say(self, *lines: str) -> list[str]:
        """Obey the first line; the others are answers to what it asks. What is said meanwhile."""
        already = len(self.out.getvalue())
        for line in lines[1:]:
            self.desk._typed.put(line)
        self.desk.obey(lines[0])
        return self.out.getvalue()[already:].splitlines()


@pytest.fixture
def talk(session, engine, tmp_path) -> Talk:
    from tests.ui.conftest import first_order_figures

    (tmp_path / "hearing-caution-seen").touch()
    return Talk(session, engine, tmp_path, first_order_figures)


# ---- what a line means ----


@pytest.mark.parametrize(
    ("line", "name", "rest"),
    [
        ("value up", "value_up", ""),
        ("Value-Up 3", "value_up", "3"),
        ("bypass", "bypass", ""),
        ("b", "bypass", ""),
        ("]", "coarse_up", ""),
        ("supply ±12", "supply", "±12"),
        ("supply +12 -5", "supply", "+12 -5"),
        ("view op", "view_opamps", ""),
        ("undo", "undo", ""),
        ("palette", "palette", ""),
        ("hear b", "hear_b", ""),
    ],
)
def test_a_line_is_an_action_by_words_or_key(line, name, rest) -> None:
    action, left = understood(KeyMap(), line)
    assert (action.name, left) == (name, rest)


@pytest.mark.parametrize(
    ("line", "message"),
    [("banana", "no such action"), ("volume", "could be volume up, volume down"), ("?!", "no such action")],
)
def test_what_is_not_clear_is_said_and_not_guessed(line, message) -> None:
    with pytest.raises(UsageError, match=message):
        understood(KeyMap(), line)


@pytest.mark.parametrize("action", KeyMap().desk, ids=lambda action: action.name)
def test_every_action_can_be_typed(talk, action) -> None:
    said = talk.say(action.words, "", "")
    assert not [line for line in said if line.startswith("error")], said
    assert said or action.name in ("quit", "cancel"), "nobody who cannot see is left without an answer"


def test_every_action_that_has_no_screen_of_its_own_is_the_same_method(talk) -> None:
    own = {"help", "palette", "colours", "restart", "quit"}
    for action in KeyMap().desk:
        assert (talk.desk.desk.method(action.name) is None) == (action.name in own)


# ---- parts ----


def test_a_part_is_set_by_its_name_and_the_effect_is_said(talk, engine) -> None:
    (line,) = talk.say("R2=220k")
    assert engine.sent[-1] == SetPart("R2", 220e3)
    # 1 / (2 pi 220 kilohm 1 nF) = 723 Hz; 20 log10 22 = 26.8 dB
    assert line == "R2 100k → 220k; corner 1.59 kHz, now 723 Hz; gain 20.0 dB, now 26.8 dB"
    assert talk.say("c1 = 2n2")[0].startswith("C1 1n → 2n2")


def test_a_count_behind_a_step_repeats_it(talk, engine) -> None:
    talk.say("value up 3")
    assert engine.sent[-1] == SetPart("R1", 13e3)  # E24: 10, 11, 12, 13 (IEC 60063)
    assert talk.say("undo 2")[-1].startswith("R1 13k → 11k")
    assert talk.say("value up 0")[0].startswith("error: 0 times")


def test_a_value_that_cannot_be_taken_says_why_and_changes_nothing(talk, engine) -> None:
    sent = list(engine.sent)
    assert "no such prefix 'z'" in talk.say("R1=4z7")[0]
    assert "no such action" in talk.say("R9=4k7")[0]
    assert engine.sent == sent


def test_a_question_is_asked_until_it_is_answered_or_left(talk, engine) -> None:
    said = talk.say("type value", "4z7", "4k7")
    assert said[0].startswith("Value of R1. ")
    assert "Now 10 kΩ" in said[0]
    assert any("not taken" in line for line in said)
    assert engine.sent[-1] == SetPart("R1", 4700.0)
    sent = list(engine.sent)
    talk.say("type value", "")
    assert engine.sent == sent


def test_the_list_of_parts_is_read_out_with_the_selected_one_named(talk) -> None:
    talk.say("value up")
    lines = talk.say("parts")
    assert lines[0].startswith("selected: R1 11 kΩ, E24, 1 %, was 10k, ")
    assert lines[1].startswith("R2 100 kΩ")
    assert talk.say("next part")[-1].startswith("selected: R2")


# ---- menus ----


def test_a_menu_takes_a_number_or_a_name(talk, engine) -> None:
    said = talk.say("opamp type", "TL072")
    assert any(line.startswith("2: ideal (now)") for line in said)
    assert engine.sent[-1].netlist.opamps[0].type == "TL072"
    talk.say("opamp type", "banana", "1")
    assert engine.sent[-1].netlist.opamps[0].type == "perfect"
    talk.say("opamp type LM741")
    assert engine.sent[-1].netlist.opamps[0].type == "LM741"


def test_a_menu_that_stays_open_goes_on_until_an_empty_line(talk) -> None:
    said = talk.say("opamp limits", "slew", "swing", "")
    assert talk.desk.desk.session.without == ("slew", "swing")
    assert any("slew: taken away" in line for line in said)
    assert "without nothing → slew, swing" in said[-1]


def test_an_answer_may_stand_on_the_same_line(talk, engine) -> None:
    said = talk.say("supply 9")
    assert "supply ±15 V → +9 V / 0 V" in said[-1]
    assert isinstance(engine.sent[-1], SetCircuit)
    assert talk.say("supply banana")[0].startswith("error: ")


# ---- listening ----


def test_play_and_pause_are_words_of_their_own(talk, engine) -> None:
    talk.say("play")
    assert engine.sent[-1] == Play()
    assert talk.say("play") == [], "it plays already"
    assert talk.say("pause")[0].startswith("paused")


def test_what_a_key_changes_in_the_state_is_said(talk, engine) -> None:
    assert talk.say("bypass") == ["BYPASS: the input is heard"]
    assert engine.sent[-1] == SetBypass(True)
    assert talk.say("volume up") == ["volume -19 dB"]
    assert engine.sent[-1] == SetVolume(-19.0)
    assert "quality fine" in talk.say("next quality")[-1]


def test_an_empty_line_reads_the_state(talk) -> None:
    (line,) = talk.say("")
    assert line == "paused, at 0:00.0 of 0:12.5, volume -20 dB, at the end: loop, quality standard"


# ---- views ----


def test_the_signal_path_is_read_out_with_the_worst_first(talk, engine) -> None:
    level = LevelReading((1.0, 1.0), (2.0, 2.0), (0.5, 0.5))
    reading = replace(engine.snapshot.opamps[0], peak_v=15.0, headroom_db=0.0, clip_events=3, clipped_s=0.01)
    engine.say(input=level, output=level, opamps=(reading,))
    talk.desk.poll()
    lines = talk.say("path")
    assert lines[0] == "full scale +18 dBu = 8.70 V peak; supply ±15 V"
    assert lines[1] == "worst: U1, CLIPS"
    assert "U1 ideal: peak 15.0 V, 0.0 dB left, clips 3 for 10 ms, CLIPS" in lines
    talk.say("next unit")
    assert "peak +5.2 dBu, rms -3.8 dBu" in talk.say("path")[2]  # 2 V peak and 0.5 V rms re 0.7746 V rms


def test_the_views_are_sentences(talk, engine) -> None:
    marks = OpAmpMarks("U1", ((48_000, 48_480),), 16.1, -15.0, 1e6)
    engine.found.append(ClipMarks("A", 600_000, 600_000, (marks,)))
    reading = replace(
        engine.snapshot.opamps[0], peak_v=15.0, headroom_db=0.0, clip_events=41, clipped_s=0.034
    )
    engine.say(opamps=(reading,), candidates=(CandidateReading("A", True, -18.2, 0.0),))
    talk.desk.poll()
    lines = talk.say("view op-amps")
    assert lines[0] == "U1 ideal"
    assert lines[1].startswith(
        "LIMITS: swing clips 41 times, 34 ms in all, at ±15.0 V: needs 1.10 V more supply"
    )
    assert "clip 1: U1 at 0:01.0 for 10 ms" in talk.say("view timeline")
    assert talk.say("next clip")[0] == "clip 1 of 1: U1 at 0:01.0 for 10 ms"
    assert engine.sent[-1] == Seek(43_200)
    lines = talk.say("view response")
    assert lines[0] == "corner 1.59 kHz; gain 20.0 dB"
    assert any(line.startswith("1.00 kHz: gain +18.") for line in lines)
    assert any("R1 10 kΩ from in to sum" in line for line in talk.say("view circuit"))
    assert talk.say("view candidates") == ["each as loud as it is", "A, -18.2 LUFS, match 0.0 dB: heard"]


def test_candidates_are_kept_heard_and_compared_in_words(talk, engine) -> None:
    talk.say("candidate keep")
    assert [type(c) for c in engine.sent[-2:]] == [KeepCandidate, SelectCandidate]
    talk.say("R1=22k")
    assert talk.say("candidate flip")[0] == "heard: A"
    assert talk.say("candidate differences") == ["From B to A", "R1 22k → 10k"]


# ---- the engine ----


def test_what_the_engine_says_is_said_and_cleaned(talk, engine) -> None:
    engine.waiting.append(Notice("the card\x1b[2J went away", "warning"))
    talk.desk.poll()
    assert "warning: the card?[2J went away" in talk.out.getvalue()
    engine.alive = False
    talk.desk.poll()
    assert "ENGINE STOPPED" in talk.out.getvalue()
    assert "cannot be restarted" in talk.say("restart")[0]


def test_a_stopped_engine_is_replaced_and_one_that_stops_again_at_once_left_to_the_person(
    session, engine, tmp_path
) -> None:
    second, third, began = type(engine)(), type(engine)(), []
    engines = [second, third]
    out = io.StringIO()
    desk = PlainDesk(
        *(session, engine),
        lines=io.StringIO(""),
        out=out,
        restart=lambda left: began.append(left) or engines.pop(0),
        config=tmp_path,
    )
    desk.obey("play")
    desk.obey("R1=22k")
    engine.alive = False
    desk.poll()
    assert engine.closed
    assert began[0].session.netlist().values["R1"] == 22e3
    assert desk.desk.link is second
    assert second.sent == [Play()]
    assert "the engine had stopped and runs again" in out.getvalue()
    second.alive = False
    desk.poll()
    assert "ENGINE STOPPED: no sound. 'restart' starts it again" in out.getvalue()
    desk.obey("restart")
    assert desk.desk.link is third
    assert third.sent == [], "sound starts by hand then"


def test_an_engine_that_will_not_start_again_is_an_error_in_a_line(session, engine, tmp_path) -> None:
    def fail(left: object) -> None:
        raise DeviceError("no audio device", "plug one in")

    out = io.StringIO()
    desk = PlainDesk(session, engine, lines=io.StringIO(""), out=out, restart=fail, config=tmp_path)
    engine.alive = False
    desk.poll()
    assert "error: no audio device" in out.getvalue()
    assert "ENGINE STOPPED" in out.getvalue()


# ---- from start to end ----


def _run(session, engine, folder: Path, text: str) -> str:
    from tests.ui.conftest import first_order_figures

    out = io.StringIO()
    PlainDesk(
        session, engine, lines=io.StringIO(text), out=out, make_figures=first_order_figures, config=folder
    ).run()
    return out.getvalue()


def test_the_first_run_says_the_hearing_caution_and_does_not_play_by_itself(
    session, engine, tmp_path
) -> None:
    said = _run(session, engine, tmp_path, "bypass\n")
    assert "caution: The listening volume starts at -20 dB." in said
    assert Play() not in engine.sent
    assert SetBypass(True) in engine.sent
    _run(session, engine, tmp_path, "play\n")
    assert Play() in engine.sent
    assert "caution" not in _run(session, engine, tmp_path, "quit\n")


def test_quit_leaves_and_so_does_the_end_of_the_input(session, engine, tmp_path) -> None:
    assert "BYPASS" not in _run(session, engine, tmp_path, "quit\nbypass\n")
    _run(session, engine, tmp_path, "")


def test_a_wrong_key_file_is_said(session, engine, tmp_path) -> None:
    (tmp_path / "keys.toml").write_text("[keys]\nbypass = 3", "utf-8")
    assert "error: " in _run(session, engine, tmp_path, "quit\n")


def test_the_line_mode_loads_no_screen() -> None:
    code = (
        "import sys, preview.ui.plain; print([m for m in ('textual', 'rich', 'numba') if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("ending", ["quit\n", ""])
def test_the_command_reads_lines_from_a_pipe(tmp_path, ending) -> None:
    environment = {**os.environ, "XDG_CONFIG_HOME": str(tmp_path), "XDG_STATE_HOME": str(tmp_path)}
    done = subprocess.run(
        [sys.executable, "-m", "preview", "listen", str(DEMO), "--plain", "--silent"],
        input=f"R1=22k\nstate\n{ending}",
        capture_output=True,
        text=True,
        timeout=120,
        env=environment,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "R1 10k → 22k" in done.stdout
    assert "paused" in done.stdout


def test_an_interrupt_from_outside_ends_the_line_mode_with_130(tmp_path) -> None:
    environment = {**os.environ, "XDG_CONFIG_HOME": str(tmp_path), "XDG_STATE_HOME": str(tmp_path)}
    process = subprocess.Popen(
        [sys.executable, "-m", "preview", "listen", str(DEMO), "--plain", "--silent"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=environment,
    )
    assert process.stdout is not None
    try:
        assert any("line mode" in line for line in iter(process.stdout.readline, ""))
        process.send_signal(signal.SIGINT)
        give_up_s = time.monotonic() + 20.0
        while process.poll() is None:
            assert time.monotonic() < give_up_s, "did not end"
            time.sleep(0.02)  # polling a process, with a deadline
        assert process.returncode == 130
    finally:
        if process.poll() is None:
            process.kill()
        process.communicate()
