"""Every action of the desk, in one table: bindings, footer, help, command palette, key map and line mode use it.

To add an action: one row here, a method ``do_<name>`` of :class:`preview.ui.desk.Desk` or of one of its rooms (no
screen needed) or of both front ends, and a row in the test of the actions.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum

from preview.ui.keynames import key_shown

__all__ = ["ACTIONS", "Action", "Group"]


class Group(StrEnum):
    """What an action is about; the headings of the help page."""

    LISTEN = "Listening"
    """Playing the recording and hearing it."""
    PARTS = "Part values"
    """Changing the circuit's values."""
    CIRCUIT = "Circuit and levels"
    """Stage, op-amps, supply, source, load, full scale."""
    CANDIDATES = "Candidates"
    """Settings that are kept and compared."""
    RESPONSE = "Response and circuit"
    """What the two drawings show."""
    SCREEN = "Screen"
    """What is shown, and leaving."""
    DIALOG = "In a dialog"
    """Keys inside a dialog only."""


@dataclass(frozen=True, slots=True)
class Action:
    """One thing the desk does."""

    name: str
    """Name of the method that does it, without ``do_``."""
    keys: tuple[str, ...]
    """The keys, as :mod:`preview.ui.keynames` writes them; empty where a person took all away."""
    help: str
    """What it does, one line for the help page."""
    group: Group
    """Where the help page lists it."""
    hint: str = ""
    """A word or two for the footer; empty for none."""

    @property
    def shown(self) -> str:
        """The keys as the help page writes them: the first, and the second unless it is a ctrl key."""
        return " or ".join(
            key_shown(key) for key in self.keys[:2] if key == self.keys[0] or "ctrl" not in key
        )

    @property
    def words(self) -> str:
        """The name as it is typed and read: ``value up``."""
        return self.name.replace("_", " ")


def _rows_of(group: Group) -> Callable[..., Action]:
    def row(name: str, keys: str, text: str, hint: str = "") -> Action:
        return Action(name, tuple(keys.split()), text, group, hint)

    return row


_listen = _rows_of(Group.LISTEN)
_parts = _rows_of(Group.PARTS)
_circuit = _rows_of(Group.CIRCUIT)
_candidates = _rows_of(Group.CANDIDATES)
_response = _rows_of(Group.RESPONSE)
_screen = _rows_of(Group.SCREEN)
_dialog = _rows_of(Group.DIALOG)

ACTIONS: tuple[Action, ...] = (
    _listen("play_pause", "space", "Play or pause", "play"),
    _parts("value_down", "left", "Next lower value of the part's series; 1 % of a turn back; open", "less"),
    _parts("value_up", "right", "Next higher value of the part's series; 1 % of a turn; closed", "more"),
    _parts("type_value", "= enter", "Type a value, such as 4k7 or 22n, 70 % or open", "type"),
    _listen("bypass", "b", "Hear the input without the stage, and back", "bypass"),
    _circuit("choose_stage", "s", "Choose another stage, or one more behind it: a cascade", "stage"),
    _screen("switch_view", "v", "Next view: response, circuit, op-amps, candidates, timeline", "view"),
    _screen("view_response", "f2", "View: the response"),
    _screen("view_circuit", "f3", "View: the circuit"),
    _screen("view_opamps", "f4", "View: what the signal asks of each op-amp"),
    _screen("view_candidates", "f5", "View: the candidates"),
    _screen("view_timeline", "f6", "View: the waveform and its clips"),
    _screen("help", "? f1", "This page", "help"),
    _screen("quit", "q ctrl+q ctrl+c", "Leave the desk", "quit"),
    _screen("palette", ": ctrl+p", "Every action by its name", "all"),
    _circuit("opamp_type", "t", "Choose the op-amp type: perfect, ideal, or a real one", "op-amp"),
    _circuit("next_opamp", "O", "The op-amp that t and the verdicts are about: all, or one after the other"),
    _circuit(
        "opamp_limits",
        "T",
        "Take a limit away from the op-amps to hear what it does, or give it back",
        "limits",
    ),
    _circuit("cascade", "&", "Put one more stage behind the present one: a cascade, solved as one circuit"),
    _circuit("cascade_drop", "_", "Take the last stage of the cascade away"),
    _parts("next_part", "down", "Select the next part"),
    _parts("previous_part", "up", "Select the part before"),
    _parts(
        "coarse_up", "] shift+right", "Coarse step up: the next of 1, 2.2, 4.7 (series E3); 10 % of a turn"
    ),
    _parts(
        "coarse_down", "[ shift+left", "Coarse step down: the next lower of 1, 2.2, 4.7; 10 % of a turn back"
    ),
    _parts("undo", "u", "Take back the last change of the circuit, as often as there are any", "undo"),
    _parts("redo", "U", "Make a change again that was taken back"),
    _parts("next_series", "e", "Part's series: E3, E6, E12 ... E192", "series"),
    _parts("nearest_value", "E", "The value of the part's series that is nearest to its present one"),
    _parts("tie", "j", "Tie the part to another, equal or in ratio, or untie it", "tie"),
    _parts("reset_part", "r", "The part's value from before", "reset"),
    _parts("reset_all", "a", "Every part's value from before"),
    _parts("mark_before", "m", "Take the values as they are now as the new 'before'"),
    _listen("back_small", ",", "Back 1 s"),
    _listen("forward_small", ".", "Forward 1 s"),
    _listen("back_large", "<", "Back 10 s"),
    _listen("forward_large", ">", "Forward 10 s"),
    _listen("to_start", "home", "To the start of the recording or of the region"),
    _listen("region_start", "(", "The region starts at the playhead", "region"),
    _listen("region_end", ")", "The region ends at the playhead"),
    _listen("region_clear", "x", "No region: the whole recording"),
    _listen("next_clip", "n", "To a little before the next clip of an op-amp", "clip"),
    _listen("previous_clip", "N", "To a little before the clip before"),
    _listen("loop_clip", "L", "Loop the clip at the playhead"),
    _listen("at_end", "l", "At the end: loop, or stop", "loop"),
    _listen("volume_up", "+", "Listening volume up 1 dB; the volts stay", "volume"),
    _listen("volume_down", "-", "Listening volume down 1 dB; the volts stay"),
    _listen("next_quality", "y", "Quality of computation: draft, standard, fine", "quality"),
    _circuit("full_scale", "f", "Full scale: the volts that the file's largest sample stands for", "scale"),
    _circuit("supply", "p", "Supply rails", "supply"),
    _circuit("next_supply", "P", "The next usual supply that the op-amps take"),
    _circuit("source", "i", "What drives the input: source and cable"),
    _circuit("load", "o", "What follows the output: the load"),
    _candidates("candidate_keep", "K", "Keep what is heard as it is, and go on in a copy of it", "keep"),
    _candidates("candidate_flip", ";", "Hear the candidate that was heard before this one", "flip"),
    _candidates("candidate_next", "'", "Hear the next candidate"),
    *(
        _candidates(f"hear_{name.lower()}", key, f"Hear candidate {name}")
        for key, name in zip("123456", "ABCDEF", strict=True)
    ),
    _candidates("candidate_choose", "B", "Choose a candidate from a list"),
    _candidates("match", "M", "Candidates at matched loudness (BS.1770), or each as loud as it is", "match"),
    _candidates("null", "D", "Null listening: this candidate minus the other one, and back"),
    _candidates("candidate_differences", "V", "List how this candidate differs from another one"),
    _candidates("candidate_copy", "C", "Put a copy of what is heard in the place of another candidate"),
    _candidates("candidate_rename", "Y", "Give the candidate that is heard a name"),
    _candidates("candidate_drop", "X", "Drop a candidate"),
    _screen("next_unit", "h", "Levels in V, dBu, dBV or dBFS", "unit"),
    _screen("clear_holds", "c", "Clear peak holds and all counts", "clear"),
    _response("phase", "d", "Phase in the response: on or off"),
    _response("ghost", "g", "The other curve: of the values from before, of the last setting, or none"),
    _response("spectrum", "z", "Live spectrum behind the response: input, output, both, none"),
    _response("noise_floor", "F", "The circuit's own noise in the response: on or off"),
    _response("axis", "G", "Frequency axis: 1 Hz to 1 MHz, or the audio band"),
    _response("cursor_down", "{", "Cursor of the response a twelfth of an octave down"),
    _response("cursor_up", "}", "Cursor of the response a twelfth of an octave up"),
    _response("cursor_off", "|", "Cursor of the response: at the corner, or off"),
    _response("node_volts", "H", "Direct and peak volts at the nodes of the circuit: on or off"),
    _response(
        "pan_left", "\\ ctrl+left", "Circuit drawing larger than its panel: show what lies to the left"
    ),
    _response(
        "pan_right", "/ ctrl+right", "Circuit drawing larger than its panel: show what lies to the right"
    ),
    _response("pan_up", "pageup ctrl+up", "Circuit drawing larger than its panel: show what lies above"),
    _response(
        "pan_down", "pagedown ctrl+down", "Circuit drawing larger than its panel: show what lies below"
    ),
    _screen("colours", "k", "Dark or light colours"),
    _listen("input", "I", "Choose what is heard: a recording, a test signal, live input", "input"),
    _listen("mute", "0", "Silence the device while everything runs, and back", "mute"),
    _listen("device", "J", "Choose the sound device; looks for new ones"),
    _listen("channels", "Z", "Choose which channels of the input are heard"),
    _circuit("output", "Q", "Choose the node of the circuit that is listened to"),
    _screen("save_session", "S", "Save everything on the desk in a file", "save"),
    _screen("open_session", "A", "Open a saved session, or one that a crash has left"),
    _screen(
        "export", "W", "Write what is heard to a file, live input as it comes; again: stop that", "export"
    ),
    _screen("write_out", "w", "The command that renders what is set here", "command"),
    _screen("restart", "R", "Start the engine again when it has stopped"),
    _dialog("accept", "enter", "Take what is typed or chosen"),
    _dialog("cancel", "escape", "Leave without a change"),
    _dialog("row_down", "down", "Next row"),
    _dialog("row_up", "up", "Row before"),
)
"""Every action, the footer's in the order in which they matter."""
