"""Every action of the table, by each of its keys, at the smallest and at a large size."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from textual.pilot import Pilot

from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD
from preview.circuit.library import stage_names
from preview.circuit.netlist import Netlist
from preview.circuit.parts import Supply
from preview.engine.messages import (
    ClearHolds,
    Command,
    KeepCandidate,
    ListenNull,
    Pause,
    RescanDevices,
    Seek,
    SelectCandidate,
    SetAtEnd,
    SetBypass,
    SetCircuit,
    SetFullScale,
    SetMatch,
    SetMute,
    SetPart,
    SetQuality,
    SetRegion,
    SetVolume,
)
from preview.session import AtEnd, Session
from preview.ui.actions import ACTIONS, Action, Group
from preview.ui.app import DeskApp
from preview.ui.bindings import bindings
from preview.ui.desk import Desk
from preview.ui.keymap import KeyMap
from preview.ui.keynames import textual_key
from preview.ui.screens.chooser import ChooserScreen
from preview.ui.screens.entry import EntryScreen
from preview.ui.screens.pages import HelpScreen, PageScreen, help_lines
from preview.ui.screens.palette import PaletteScreen
from preview.ui.units import LevelUnit
from preview.ui.view import Axis, Behind, Ghost, Shown
from preview.values.quality import Quality

SMALL, LARGE = (80, 24), (160, 48)
Keys = tuple[str, ...]
Check = Callable[[DeskApp, list[Command]], bool]

AT_3_S = (".", ".", ".")
"""Keys that bring the playhead from 0 to 3 s; the file runs at 48 kHz."""
TO_BIQUAD = ("s", *["up"] * (stage_names().index("inverting-low-pass") + 3), "enter", "f3")
"""Keys that open the last stage of the list, whose drawing is larger than the view at 80 x 24."""


def _sent(command: Command) -> Check:
    return lambda _app, sent: sent[-1:] == [command]


def _asks(title: str) -> Check:
    return lambda app, _sent: isinstance(app.screen, EntryScreen) and app.screen.question.title == title


def _cursor_moved(ratio: float) -> Check:
    """By that ratio from where it begins: the corner, or 1 kHz while that is not known yet."""
    return lambda app, _sent: any(
        math.isclose(app.desk.view.cursor_hz, start_hz * ratio, rel_tol=1e-6)
        for start_hz in (1e3, 1.0 / (2.0 * math.pi * 100e3 * 1e-9))
    )


def _panned(columns: int, lines: int) -> Check:
    """On a small screen; on a large one the whole drawing is shown and does not move."""
    return lambda app, _sent: app.desk.view.pan == ((columns, lines) if app.size == SMALL else (0, 0))


def _keeps(letter: str) -> Check:
    return lambda _app, sent: isinstance(sent[-1], KeepCandidate) and sent[-1].letter == letter


def _lists(title: str) -> Check:
    return lambda app, _sent: isinstance(app.screen, ChooserScreen) and app.screen.menu.title == title


CHECKS: dict[str, tuple[Keys, Check]] = {
    "play_pause": ((), _sent(Pause())),
    # E24 around 10 kilohm: 9.1, 10, 11; E3: 4.7, 10, 22 (IEC 60063).
    "value_up": ((), _sent(SetPart("R1", 11e3))),
    "value_down": ((), _sent(SetPart("R1", 9.1e3))),
    "coarse_up": ((), _sent(SetPart("R1", 22e3))),
    "coarse_down": ((), _sent(SetPart("R1", 4.7e3))),
    "nearest_value": (("=", *"10k4", "enter"), _sent(SetPart("R1", 10e3))),
    "type_value": ((), _asks("Value of R1")),
    "tie": ((), _lists("Tie R1: when one moves, the others move with it")),
    "bypass": ((), _sent(SetBypass(True))),
    "choose_stage": ((), _lists("Stage")),
    "cascade": ((), _lists("The next stage of the cascade")),
    "cascade_drop": ((), lambda app, _: "this is a single stage" in app.foot.message),
    "switch_view": ((), lambda app, _: app.desk.view.shown is Shown.CIRCUIT),
    "view_response": (("v",), lambda app, _: app.desk.view.shown is Shown.RESPONSE),
    "view_circuit": ((), lambda app, _: app.desk.view.shown is Shown.CIRCUIT),
    "view_opamps": ((), lambda app, _: app.desk.view.shown is Shown.OPAMPS),
    "view_candidates": ((), lambda app, _: app.desk.view.shown is Shown.CANDIDATES),
    "view_timeline": ((), lambda app, _: app.desk.view.shown is Shown.TIMELINE),
    "help": ((), lambda app, _: isinstance(app.screen, HelpScreen)),
    "palette": ((), lambda app, _: isinstance(app.screen, PaletteScreen)),
    "quit": ((), lambda app, _: app._exit and app.return_value == app.desk.session),
    "next_part": ((), lambda app, _: app.desk.parts.part.designator == "R2"),
    "previous_part": ((), lambda app, _: app.desk.parts.part.designator == "C1"),
    "next_series": ((), lambda app, _: app.desk.parts.part.series == "E48"),
    "undo": (("right",), _sent(SetPart("R1", 10e3))),
    "redo": (("right", "u"), _sent(SetPart("R1", 11e3))),
    "reset_part": (("right", "right"), _sent(SetPart("R1", 10e3))),
    "reset_all": (
        ("right", "down", "right"),
        lambda _, sent: sent[-2:] == [SetPart("R1", 10e3), SetPart("R2", 100e3)],
    ),
    "mark_before": (("right",), lambda app, _: app.desk.before.stage.part("R1").value == 11e3),
    "back_small": (AT_3_S, _sent(Seek(96_000))),
    "forward_small": ((), _sent(Seek(48_000))),
    "back_large": (AT_3_S, _sent(Seek(0))),
    "forward_large": ((), _sent(Seek(480_000))),
    "to_start": (AT_3_S, _sent(Seek(0))),
    "region_start": (AT_3_S, _sent(SetRegion(144_000, 600_000))),
    "region_end": (AT_3_S, _sent(SetRegion(0, 144_000))),
    "region_clear": ((*AT_3_S, ")"), _sent(SetRegion(None, None))),
    "next_clip": ((), lambda app, _: "has not been looked through yet" in app.foot.message),
    "previous_clip": ((), lambda app, _: "has not been looked through yet" in app.foot.message),
    "loop_clip": ((), lambda app, _: "has not been looked through yet" in app.foot.message),
    "at_end": ((), _sent(SetAtEnd(AtEnd.STOP))),
    "volume_up": ((), _sent(SetVolume(-19.0))),
    "volume_down": ((), _sent(SetVolume(-21.0))),
    "next_quality": ((), _sent(SetQuality(Quality.FINE))),
    "full_scale": ((), _asks("Full scale")),
    "supply": ((), _asks("Supply")),
    "source": ((), _asks("Source")),
    "load": ((), _asks("Load")),
    "opamp_type": ((), _lists("Op-amp type of U1")),
    "candidate_keep": (
        (),
        lambda app, sent: _keeps("B")(app, sent[-2:-1]) and sent[-1] == SelectCandidate("B"),
    ),
    "input": ((), _lists("Input")),
    "mute": ((), _sent(SetMute(True))),
    "device": ((), _sent(RescanDevices())),
    "channels": ((), lambda app, _: app.foot.message == "every channel is heard"),
    "output": ((), lambda app, _: app.foot.message == "this stage has one output"),
    "save_session": ((), _asks("Save the session as")),
    "open_session": ((), _asks("Open a session")),
    "export": ((), _asks("Export what is heard to")),
    "candidate_flip": (("K",), _sent(SelectCandidate("A"))),
    "candidate_next": (("K", "K"), _sent(SelectCandidate("A"))),
    "hear_a": (("K",), _sent(SelectCandidate("A"))),
    "hear_b": (("K", "1"), _sent(SelectCandidate("B"))),
    "hear_c": (("K", "K", "1"), _sent(SelectCandidate("C"))),
    "hear_d": (("K", "K", "K", "1"), _sent(SelectCandidate("D"))),
    "hear_e": (("K", "K", "K", "K", "1"), _sent(SelectCandidate("E"))),
    "hear_f": ((), lambda app, _: "there is no candidate F" in app.foot.message),
    "candidate_choose": ((), _lists("Hear")),
    "match": ((), _sent(SetMatch(True))),
    "null": (("K",), _sent(ListenNull(("B", "A")))),
    "candidate_differences": (("K",), lambda app, _: isinstance(app.screen, PageScreen)),
    "candidate_copy": (("K",), _lists("Copy B over")),
    "candidate_rename": ((), _asks("Name of A")),
    "candidate_drop": (("K",), _lists("Drop")),
    "next_opamp": ((), lambda app, _: app.desk.view.opamp == "U1"),
    "opamp_limits": ((), _lists("Limits of the op-amps: Enter takes one away or gives it back")),
    "next_supply": ((), lambda app, sent: app.desk.session.supply == Supply(18.0, -18.0)),
    "ghost": ((), lambda app, _: app.desk.view.ghost is Ghost.LAST),
    "spectrum": ((), lambda app, _: app.desk.view.behind is Behind.OUTPUT),
    "noise_floor": ((), lambda app, _: app.desk.view.noise),
    "axis": ((), lambda app, _: app.desk.view.axis is Axis.AUDIO),
    "cursor_down": (("|",), _cursor_moved(2.0 ** (-1 / 12))),
    "cursor_up": (("|",), _cursor_moved(2.0 ** (1 / 12))),
    "cursor_off": (("}",), lambda app, _: app.desk.view.cursor_hz is None),
    "node_volts": ((), lambda app, _: app.desk.view.node_volts),
    "pan_left": ((*TO_BIQUAD, "/", "/"), _panned(8, 0)),
    "pan_right": (TO_BIQUAD, _panned(8, 0)),
    "pan_up": ((*TO_BIQUAD, "pagedown", "pagedown"), _panned(0, 2)),
    "pan_down": (TO_BIQUAD, _panned(0, 2)),
    "next_unit": ((), lambda app, _: app.desk.view.unit is LevelUnit.DBU),
    "clear_holds": ((), _sent(ClearHolds())),
    "phase": ((), lambda app, _: app.desk.view.phase),
    "colours": ((), lambda app, _: not app.look.palette.dark and app.theme == "desk-light"),
    "write_out": ((), lambda app, _: isinstance(app.screen, PageScreen)),
    "restart": ((), lambda app, _: app.foot.message == "the engine is running"),
}
"""For each action: keys to press before it, and what must be true after it."""

TESTED_IN_DIALOGS = {"accept", "cancel", "row_down", "row_up"}
"""Tested below, in a dialog."""

DESK_ACTIONS = [action for action in ACTIONS if action.group is not Group.DIALOG]


@pytest.fixture(autouse=True)
def _dark_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("COLORFGBG", raising=False)


@pytest.mark.parametrize(
    ("action", "key", "size"),
    [(action, key, SMALL) for action in DESK_ACTIONS for key in action.keys]
    + [(action, action.keys[0], LARGE) for action in DESK_ACTIONS],
    ids=lambda value: value.name if isinstance(value, Action) else str(value),
)
async def test_each_key_does_what_its_row_says(make_app, engine, action: Action, key: str, size) -> None:
    assert action.name in CHECKS, f"the action {action.name} has no row in this test"
    before, check = CHECKS[action.name]
    app: DeskApp = make_app()
    async with app.run_test(size=size) as pilot:
        await pilot.press(*(textual_key(k) for k in (*before, key)))
        await pilot.pause()
        assert check(app, engine.sent), f"{action.name} by {key}: last commands {engine.sent[-3:]}"


def test_every_action_has_a_test() -> None:
    assert {action.name for action in ACTIONS} == set(CHECKS) | TESTED_IN_DIALOGS


def test_every_action_has_help_and_a_method(session, engine) -> None:
    desk = Desk(session, engine)
    for action in ACTIONS:
        assert len(action.help) > 5, f"{action.name} has no help text"
        assert action.shown
        assert action.keys
        if action.group is not Group.DIALOG:
            assert desk.method(action.name) or hasattr(DeskApp, f"do_{action.name}"), action.name


def test_no_two_actions_of_the_desk_share_a_key() -> None:
    keys = [key for action in DESK_ACTIONS for key in action.keys]
    assert len(keys) == len(set(keys))


def test_no_action_needs_a_key_that_terminals_do_not_send() -> None:
    keys = [key for action in ACTIONS for key in action.keys]
    assert not [key for key in keys if key.startswith(("alt+", "super+", "meta+", "cmd+"))]
    # What a plain terminal may not tell apart (shift with an arrow) has a second key.
    for action in ACTIONS:
        if any(key.startswith("shift+") for key in action.keys):
            assert any(not key.startswith("shift+") for key in action.keys), action.name


def test_every_key_that_the_desk_binds_is_in_the_table(make_app) -> None:
    app: DeskApp = make_app()
    known = {textual_key(key) for action in DESK_ACTIONS for key in action.keys}
    ours = {key for key, bound in app._bindings.key_to_bindings.items() if bound[0].action.startswith("do(")}
    assert ours == known
    for bound in app._bindings.key_to_bindings.values():
        for binding in bound:
            assert binding.description, f"{binding.key} has no help text"
    assert {binding.key for binding in bindings(DESK_ACTIONS)} == known


def test_the_help_page_names_every_action() -> None:
    page = "\n".join(line.plain for line in help_lines(KeyMap(), "somewhere/keys.toml"))
    for action in ACTIONS:
        assert action.help in page
        assert action.shown in page
    assert "somewhere/keys.toml" in page


async def test_a_held_key_scrolls_the_help_page_to_its_end(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("question_mark")
        page = app.screen.query_one("#page")
        for _ in range(4):  # keys that come faster than the screen is painted count one by one
            app.screen.do_row_down()
        assert page.scroll_offset.y == 12
        await pilot.press(*["down"] * 60)
        assert page.scroll_offset.y == page.max_scroll_y
        app.screen.do_row_up()
        assert page.scroll_offset.y == page.max_scroll_y - 3


async def test_the_footer_shows_help_and_quit_at_80_columns(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        foot = "".join(segment.text for segment in app.foot.painted[0])
        assert "? help" in foot
        assert "q quit" in foot
        assert len(foot.rstrip()) <= 80


# ---- dialogs ----


async def _type(pilot: Pilot[Session], text: str) -> None:
    for ch in text:
        await pilot.press({" ": "space", "+": "plus", "-": "minus", ".": "full_stop"}.get(ch, ch))
    await pilot.pause()


def _netlist(command: Command) -> Netlist:
    assert isinstance(command, SetCircuit)
    return command.netlist


async def test_a_typed_4k7_is_echoed_and_sent(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("equals_sign")
        await _type(pilot, "4k7")
        assert app.screen.answer_line == "R1: 4k7 = 4.7 kΩ (4700 ohm)"
        await pilot.press("enter")
        await pilot.pause()
        assert engine.sent[-1] == SetPart("R1", 4700.0)
        assert not isinstance(app.screen, EntryScreen)


@pytest.mark.parametrize(
    ("text", "message"),
    [("4z7", "no such prefix 'z'"), ("0", "zero"), ("1T5", "out of range"), ("banana", "not a number")],
)
async def test_a_value_that_cannot_be_taken_is_refused_in_place(make_app, engine, text, message) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        sent = list(engine.sent)
        await pilot.press("equals_sign")
        await _type(pilot, text)
        await pilot.press("enter")
        await pilot.pause()
        assert isinstance(app.screen, EntryScreen)
        assert "not taken" in app.screen.answer_line
        assert message in app.screen.answer_line
        assert engine.sent == sent
        await pilot.press("escape")
        await pilot.pause()
        assert not isinstance(app.screen, EntryScreen)
        assert engine.sent == sent


async def test_the_capacitor_takes_a_code_in_farads(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.press("up", "enter")
        await _type(pilot, "22n")
        await pilot.press("enter")
        await pilot.pause()
        assert engine.sent[-1] == SetPart("C1", 22e-9)


@pytest.mark.parametrize(
    ("key", "text", "check"),
    [
        # +4 dBu is 1.228 V rms, 1.736 V peak of a sine (0 dBu = 0.7746 V, common practice).
        (
            "f",
            "+4 dBu",
            lambda c: isinstance(c, SetFullScale) and math.isclose(c.full_scale_v, 1.7362, rel_tol=1e-4),
        ),
        ("p", "9", lambda c: (_netlist(c).opamps[0].high_v, _netlist(c).opamps[0].low_v) == (9.0, 0.0)),
        (
            "p",
            "+12 -5",
            lambda c: (_netlist(c).opamps[0].high_v, _netlist(c).opamps[0].low_v) == (12.0, -5.0),
        ),
        ("i", "600", lambda c: _netlist(c).values["Rsource"] == 600.0),
        ("o", "10k", lambda c: _netlist(c).values["Rload"] == 10e3),
    ],
)
async def test_levels_supply_source_and_load_are_typed(make_app, engine, key, text, check) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press(key)
        await _type(pilot, text)
        await pilot.press("enter")
        await pilot.pause()
        assert check(engine.sent[-1])


async def test_a_source_of_0_and_no_load_are_ideal_again(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        for key, text in (("i", "600"), ("i", "0"), ("o", "10k"), ("o", "none")):
            await pilot.press(key)
            await _type(pilot, text)
            await pilot.press("enter")
            await pilot.pause()
        assert app.desk.session.source == IDEAL_SOURCE
        assert app.desk.session.load == NO_LOAD
        assert set(_netlist(engine.sent[-1]).values) == {"R1", "R2", "C1"}


async def test_the_stage_chooser_moves_takes_and_leaves(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("s", "up", "enter")  # accept, row_up
        await pilot.pause()
        assert app.desk.session.stage.name == "inverting-high-pass"
        assert isinstance(engine.sent[-1], SetCircuit)
        await pilot.press("s", "down", "enter")  # row_down
        await pilot.pause()
        assert app.desk.session.stage.name == "inverting-low-pass"
        sent = list(engine.sent)
        await pilot.press("s", "down", "escape")  # cancel
        await pilot.pause()
        assert app.desk.session.stage.name == "inverting-low-pass"
        assert engine.sent == sent


async def test_a_stage_file_is_opened_by_its_path(make_app, engine, tmp_path) -> None:
    from preview.circuit.library import stage_source

    file = tmp_path / "mine.toml"
    file.write_text(stage_source("inverting-high-pass").replace("Inverting high-pass", "Mine [red]"), "utf-8")
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        above = stage_names().index(app.desk.session.stage.name)
        await pilot.press("s", *["up"] * (above + 2), "enter")  # past the first row to the last: a file
        await pilot.pause()
        assert isinstance(app.screen, EntryScreen)
        app.screen.query_one("#typed").value = "no-such-stage"
        await pilot.press("enter")
        await pilot.pause()
        assert "no stage named" in app.screen.answer_line
        app.screen.query_one("#typed").value = str(file)
        await pilot.press("enter")
        await pilot.pause()
        assert app.desk.session.stage.title == "Mine [red]"
        head = "".join(segment.text for segment in app.head.painted[0])
        assert "Mine [red]" in head


async def test_help_scrolls_and_closes_by_its_own_key(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("question_mark")
        await pilot.pause()
        page = app.screen.query_one("#page")
        await pilot.press("down", "down")
        await pilot.pause()
        assert page.scroll_y == 6
        await pilot.press("up")
        await pilot.pause()
        assert page.scroll_y == 3
        await pilot.press("question_mark")
        await pilot.pause()
        assert not isinstance(app.screen, HelpScreen)
