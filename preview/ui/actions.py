"""Every key of the desk, in one table: bindings, footer hints and the help page are made from it.

To add a key: one row here, a method ``do_<name>`` of :class:`preview.ui.desk.Desk` (no screen needed) or of
:class:`preview.ui.app.DeskApp` (opens a dialog), and a row in the test of the actions.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from enum import StrEnum

from textual.binding import Binding

__all__ = ["ACTIONS", "Action", "Group", "action_named", "bindings", "footer_actions"]


class Group(StrEnum):
    """What an action is about; the headings of the help page."""

    LISTEN = "Listening"
    """Playing the recording and hearing it."""
    PARTS = "Part values"
    """Changing the circuit's values."""
    CIRCUIT = "Circuit and levels"
    """Stage, supply, source, load, full scale."""
    SCREEN = "Screen"
    """What is shown, and leaving."""
    DIALOG = "In a dialog"
    """Keys inside a dialog only."""


@dataclass(frozen=True, slots=True)
class Action:
    """One thing a key does."""

    name: str
    """Name of the method that does it, without ``do_``."""
    keys: tuple[str, ...]
    """The keys as Textual names them."""
    shown: str
    """The keys as the screen writes them."""
    help: str
    """What it does, one line for the help page."""
    group: Group
    """Where the help page lists it."""
    hint: str = ""
    """A word or two for the footer; empty for none."""


def _rows_of(group: Group) -> Callable[..., Action]:
    def row(name: str, keys: str, shown: str, text: str, hint: str = "") -> Action:
        return Action(name, tuple(keys.split()), shown, text, group, hint)

    return row


_listen = _rows_of(Group.LISTEN)
_parts = _rows_of(Group.PARTS)
_circuit = _rows_of(Group.CIRCUIT)
_screen = _rows_of(Group.SCREEN)
_dialog = _rows_of(Group.DIALOG)

ACTIONS: tuple[Action, ...] = (
    _listen("play_pause", "space", "space", "Play or pause", "play"),
    _parts("value_down", "left", "←", "Next lower value of the part's series", "less"),
    _parts("value_up", "right", "→", "Next higher value of the part's series", "more"),
    _parts("type_value", "equals_sign enter", "= or Enter", "Type a value, such as 4k7 or 22n", "type"),
    _listen("bypass", "b", "b", "Hear the input without the stage, and back", "bypass"),
    _circuit("choose_stage", "s", "s", "Choose another stage", "stage"),
    _screen("switch_view", "v", "v", "Curve or schematic, where both do not fit", "view"),
    _screen("help", "question_mark f1", "? or F1", "This page", "help"),
    _screen("quit", "q ctrl+q ctrl+c", "q", "Leave the desk", "quit"),
    _circuit("opamp_type", "t", "t", "Choose the op-amp type: perfect, ideal, or a real one", "op-amp"),
    _parts("next_part", "down", "↓", "Select the next part"),
    _parts("previous_part", "up", "↑", "Select the part before"),
    _parts(
        "coarse_up",
        "right_square_bracket shift+right",
        "] or shift →",
        "Coarse step up: the next of 1, 2.2, 4.7 (series E3)",
    ),
    _parts(
        "coarse_down",
        "left_square_bracket shift+left",
        "[ or shift ←",
        "Coarse step down: the next lower of 1, 2.2, 4.7 (series E3)",
    ),
    _parts("next_series", "e", "e", "Part's series: E3, E6, E12 ... E192", "series"),
    _parts("undo", "u", "u", "Take back the last change of the circuit", "undo"),
    _parts("redo", "U", "U", "Make a change again that was taken back"),
    _parts("reset_part", "r", "r", "The part's value from before", "reset"),
    _parts("reset_all", "a", "a", "Every part's value from before"),
    _parts("mark_before", "m", "m", "Take the values as they are now as the new 'before'"),
    _listen("back_small", "comma", ",", "Back 1 s"),
    _listen("forward_small", "full_stop", ".", "Forward 1 s"),
    _listen("back_large", "less_than_sign", "<", "Back 10 s"),
    _listen("forward_large", "greater_than_sign", ">", "Forward 10 s"),
    _listen("to_start", "home", "Home", "To the start of the recording or of the region"),
    _listen("region_start", "left_parenthesis", "(", "The region starts at the playhead", "region"),
    _listen("region_end", "right_parenthesis", ")", "The region ends at the playhead"),
    _listen("region_clear", "x", "x", "No region: the whole recording"),
    _listen("at_end", "l", "l", "At the end: loop, or stop", "loop"),
    _listen("volume_up", "plus", "+", "Listening volume up 1 dB; the volts stay", "volume"),
    _listen("volume_down", "minus", "-", "Listening volume down 1 dB; the volts stay"),
    _listen("next_quality", "y", "y", "Quality of computation: draft, standard, fine", "quality"),
    _circuit(
        "full_scale", "f", "f", "Full scale: the volts that the file's largest sample stands for", "scale"
    ),
    _circuit("supply", "p", "p", "Supply rails", "supply"),
    _circuit("source", "i", "i", "What drives the input: source and cable"),
    _circuit("load", "o", "o", "What follows the output: the load"),
    _screen("clear_holds", "c", "c", "Clear peak holds and all counts", "clear"),
    _screen("phase", "d", "d", "Phase in the curve: on or off"),
    _screen("colours", "k", "k", "Dark or light colours"),
    _screen("write_out", "w", "w", "The command that renders what is set here", "command"),
    _screen("restart", "R", "R", "Start the engine again when it has stopped"),
    _dialog("accept", "enter", "Enter", "Take what is typed or chosen"),
    _dialog("cancel", "escape", "Esc", "Leave without a change"),
    _dialog("row_down", "down", "↓", "Next row"),
    _dialog("row_up", "up", "↑", "Row before"),
)
"""Every action, the footer's in the order in which they matter."""


_BY_NAME = {action.name: action for action in ACTIONS}


def action_named(name: str) -> Action:
    """The action of that name; KeyError if there is none."""
    return _BY_NAME[name]


def bindings(actions: Iterable[Action]) -> list[Binding]:
    """Textual's bindings of these actions; each calls ``action_do`` with the action's name."""
    return [
        Binding(key, f"do('{action.name}')", action.help, show=False, priority=key == "ctrl+q")
        for action in actions
        for key in action.keys
    ]


def footer_actions() -> tuple[Action, ...]:
    """The actions with a footer hint, in the order in which they matter."""
    return tuple(a for a in ACTIONS if a.hint)
