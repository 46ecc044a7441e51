"""A person's own keys, the names of keys, and the palette of every action."""

from __future__ import annotations

import pytest
from textual.keys import key_to_character

from preview.engine.messages import SetBypass, SetPart
from preview.errors import UsageError
from preview.ui.actions import ACTIONS, Group
from preview.ui.app import DeskApp
from preview.ui.keymap import KEYS_FILE, KeyMap, read_keys
from preview.ui.keynames import key_shown, key_understood, textual_key
from preview.ui.screens.pages import help_lines
from preview.ui.screens.palette import PaletteScreen, matching


def own_keys(folder, text: str) -> KeyMap:
    (folder / KEYS_FILE).write_text(text, "utf-8")
    return read_keys(folder)


# ---- names ----


@pytest.mark.parametrize("character", "!\"#$%&'()*+,-./:;<=>?@[\\]^_`{|}~")
def test_every_ascii_sign_has_the_name_that_the_library_uses(character) -> None:
    name = textual_key(character)
    # the library's own way back, but for the names that it shortens
    shortened = {"slash": "/", "backslash": "\\", "at": "@", "minus": "-", "plus": "+", "underscore": "_"}
    assert shortened.get(name, key_to_character(name)) == character


@pytest.mark.parametrize(
    ("text", "key", "shown"),
    [
        ("x", "x", "x"),
        ("X", "X", "X"),
        (" ", "space", "space"),
        ("Left", "left", "←"),
        ("esc", "escape", "Esc"),
        ("F5", "f5", "F5"),
        ("Ctrl+K", "ctrl+k", "ctrl+k"),
        ("shift+left", "shift+left", "shift ←"),
        ("PgUp", "pageup", "PgUp"),
    ],
)
def test_keys_are_read_as_people_write_them(text, key, shown) -> None:
    assert key_understood(text) == key
    assert key_shown(key) == shown


@pytest.mark.parametrize(
    "text", ["", "alt+x", "cmd+c", "f13", "banana", "shift+x", "ctrl+1", "ctrl+", "\x07"]
)
def test_keys_that_terminals_do_not_send_are_refused(text) -> None:
    with pytest.raises(UsageError):
        key_understood(text)


def test_every_key_of_the_table_reads_back_as_itself() -> None:
    for action in ACTIONS:
        for key in action.keys:
            assert key_understood(key) == key


# ---- the file ----


def test_without_a_file_the_table_is_in_force(tmp_path) -> None:
    assert read_keys(tmp_path).actions == ACTIONS


def test_a_key_of_ones_own_replaces_those_of_the_table(tmp_path) -> None:
    keys = own_keys(tmp_path, '[keys]\nbypass = "f5"\nplay_pause = ["space", "f6"]\n')
    assert keys["bypass"].keys == ("f5",)
    assert keys["play_pause"].shown == "space or F6"
    assert keys.for_key("b") is None
    assert keys.for_key("f5") is keys["bypass"]


def test_a_key_given_to_another_action_leaves_the_one_it_had(tmp_path) -> None:
    keys = own_keys(tmp_path, '[keys]\nundo = "b"\n')
    assert keys["undo"].keys == ("b",)
    assert keys["bypass"].keys == ()
    assert "bypass" not in [action.name for action in keys.footer]
    assert keys.shown("bypass") == "bypass"
    assert "(no key)" in "\n".join(line.plain for line in help_lines(keys))


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('[keys]\nbypas = "x"', "no such action .did you mean bypass"),
        ('[keys]\nbypass = "alt+x"', r"\[keys\] bypass = .*no such key"),
        ("[keys]\nbypass = 3", "not a key"),
        ('[keys]\nbypass = "z"\nundo = "z"', "is the key of"),
        ("[keys]\nquit = []", "need a key each"),
        ("[kees]\n", r"\[kees\] is not a table of keys"),
        ("keys = 3", "is not a table of keys"),
        ("[keys", "keys.toml"),
        ("\udcff", "keys.toml"),
    ],
)
def test_a_file_that_cannot_be_taken_says_why(tmp_path, text, message) -> None:
    (tmp_path / KEYS_FILE).write_bytes(text.encode("utf-8", "surrogateescape"))
    with pytest.raises(UsageError, match=message):
        read_keys(tmp_path)


async def test_the_desk_listens_to_a_persons_own_keys(make_app, engine, tmp_path) -> None:
    own_keys(tmp_path, '[keys]\nbypass = "f5"\nvalue_up = ["n"]\n')
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("f5")
        assert engine.sent[-1] == SetBypass(True)
        sent = list(engine.sent)
        await pilot.press("b", "right")
        assert engine.sent == sent
        await pilot.press("n")
        assert engine.sent[-1] == SetPart("R1", 11e3)
        foot = "".join(segment.text for segment in app.foot.painted[-1])
        assert "F5 bypass" in foot
        assert "n more" in foot


async def test_a_wrong_file_is_said_and_the_table_is_in_force(make_app, engine, tmp_path) -> None:
    (tmp_path / KEYS_FILE).write_text("[keys]\nbypass = 3", "utf-8")
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        assert "not a key" in app.foot.message
        await pilot.press("b")
        assert engine.sent[-1] == SetBypass(True)


async def test_dialogs_use_a_persons_own_keys(make_app, tmp_path) -> None:
    own_keys(tmp_path, '[keys]\ncancel = "f9"\n')
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("s", "escape")
        await pilot.pause()
        assert len(app.screen_stack) == 2
        await pilot.press("f9")
        await pilot.pause()
        assert len(app.screen_stack) == 1


# ---- the palette ----


def test_the_palette_has_every_action_of_the_desk() -> None:
    answers = [choice.answer for choice in matching(KeyMap(), "")]
    assert answers == [action.name for action in ACTIONS if action.group is not Group.DIALOG]


def test_words_narrow_the_palette_and_names_come_first() -> None:
    assert matching(KeyMap(), "volume")[0].answer == "volume_up"
    assert [choice.answer for choice in matching(KeyMap(), "volume down")] == ["volume_down"]
    assert "supply" in [choice.answer for choice in matching(KeyMap(), "rails")]
    assert matching(KeyMap(), "no such thing") == []


async def test_the_palette_does_what_is_typed(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("colon", *"byp")
        await pilot.pause()
        assert isinstance(app.screen, PaletteScreen)
        await pilot.press("enter")
        await pilot.pause()
        assert engine.sent[-1] == SetBypass(True)
        await pilot.press("ctrl+p", *"part", "down", "up", "down", "enter")
        await pilot.pause()
        assert not isinstance(app.screen, PaletteScreen)


async def test_nothing_that_fits_does_nothing(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        sent = list(engine.sent)
        await pilot.press("colon", *"qqqq", "down", "enter")
        await pilot.pause()
        assert isinstance(app.screen, PaletteScreen)
        await pilot.press("escape")
        await pilot.pause()
        assert engine.sent == sent


async def test_an_action_without_a_key_is_a_click_away(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.pause()
        line = "".join(segment.text for segment in app.foot.painted[0])
        await pilot.click("#foot", offset=(line.index(": all"), 0))
        await pilot.pause()
        await pilot.click("#choices", offset=(5, 4))  # play pause, value down, value up, type value, bypass
        await pilot.pause()
        assert engine.sent[-1] == SetBypass(True)
