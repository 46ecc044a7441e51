"""What the desk shows and how: the view, the unit of levels, what the response has in it. No screen in here."""

from __future__ import annotations

from enum import StrEnum
from typing import TYPE_CHECKING

from preview.engine.messages import ProbeNodes
from preview.ui.units import LevelUnit
from preview.ui.words import hertz

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Axis", "Behind", "Ghost", "Shown", "View"]


class Shown(StrEnum):
    """The views beside the list of parts."""

    RESPONSE = "response"
    """Gain and phase over frequency."""
    CIRCUIT = "circuit"
    """The schematic with live values."""
    OPAMPS = "op-amps"
    """What this signal asks of each op-amp, with reasons and cures."""
    CANDIDATES = "candidates"
    """Settings that are kept, and how they differ."""
    TIMELINE = "timeline"
    """The waveform with its clips."""


class Ghost(StrEnum):
    """The other curve behind the response."""

    BEFORE = "before"
    """Of the values that were marked as 'before'."""
    LAST = "last"
    """Of the setting just before the last change."""
    NONE = "none"
    """No other curve."""


class Behind(StrEnum):
    """The live spectrum behind the response."""

    BOTH = "input and output"
    """The output as columns, the input as their tops."""
    OUTPUT = "output"
    """The output alone."""
    INPUT = "input"
    """The input alone."""
    NONE = "none"
    """No spectrum."""


class Axis(StrEnum):
    """The frequency axis."""

    WIDE = "1 Hz to 1 MHz"
    """Everything that an op-amp circuit does."""
    AUDIO = "20 Hz to 20 kHz"
    """The audio band."""

    @property
    def ends_hz(self) -> tuple[float, float]:
        """Lowest and highest frequency [Hz]."""
        return (1.0, 1e6) if self is Axis.WIDE else (20.0, 20e3)


PAN_COLUMNS, PAN_LINES = 8, 2
"""By how much a key moves a drawing that is larger than its panel [cells]."""
CURSOR_STEP_RATIO = 2.0 ** (1.0 / 12.0)
"""The cursor moves by a twelfth of an octave."""


def _after(now: StrEnum) -> StrEnum:
    """The member after this one, round and round."""
    members = list(type(now))
    return members[(members.index(now) + 1) % len(members)]


class View:
    """What is shown."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.shown = Shown.RESPONSE
        self.unit = LevelUnit.VOLTS
        self.phase = False
        self.ghost = Ghost.BEFORE
        self.behind = Behind.BOTH
        self.noise = False
        self.axis = Axis.WIDE
        self.cursor_hz: float | None = None
        self.node_volts = False
        self.opamp: str | None = None
        self.pan = (0, 0)
        """How far the drawing is moved from where the selected part puts it: columns and lines."""

    # ---- which view ----

    def show(self, shown: Shown) -> None:
        """Show this view."""
        self.shown = shown

    def do_switch_view(self) -> str:
        """The next view."""
        self.show(Shown(_after(self.shown)))
        return f"view: {self.shown}"

    def do_view_response(self) -> None:
        """The response."""
        self.show(Shown.RESPONSE)

    def do_view_circuit(self) -> None:
        """The schematic."""
        self.show(Shown.CIRCUIT)

    def do_view_opamps(self) -> None:
        """The verdicts."""
        self.show(Shown.OPAMPS)

    def do_view_candidates(self) -> None:
        """The candidates."""
        self.show(Shown.CANDIDATES)

    def do_view_timeline(self) -> None:
        """The waveform."""
        self.show(Shown.TIMELINE)

    def do_next_opamp(self) -> str:
        """All op-amps, or one after the other."""
        names = [None, *(opamp.designator for opamp in self._desk.session.stage.opamps)]
        at = names.index(self.opamp) if self.opamp in names else 0
        self.opamp = names[(at + 1) % len(names)]
        return f"op-amp: {self.opamp or 'all'}"

    def choose_opamp(self, designator: str) -> str:
        """Select an op-amp; one that is selected already gives way to all of them."""
        self.opamp = None if self.opamp == designator else designator
        return f"op-amp: {self.opamp or 'all'}"

    # ---- how it is shown ----

    def do_next_unit(self) -> str:
        """V, dBu, dBV, dBFS."""
        self.unit = self.unit.next
        return f"levels in {self.unit}"

    def do_phase(self) -> str:
        """Phase in the response, or not."""
        self.phase = not self.phase
        return f"phase {'shown' if self.phase else 'hidden'}"

    def do_ghost(self) -> str:
        """The other curve: before, last, none."""
        self.ghost = Ghost(_after(self.ghost))
        return {
            Ghost.BEFORE: "behind the response: the values from before",
            Ghost.LAST: "behind the response: the setting before the last change",
            Ghost.NONE: "behind the response: no other curve",
        }[self.ghost]

    def do_spectrum(self) -> str:
        """The live spectrum behind the response."""
        self.behind = Behind(_after(self.behind))
        return f"spectrum behind the response: {self.behind}"

    def do_noise_floor(self) -> str:
        """The circuit's own noise in the response, or not."""
        self.noise = not self.noise
        return f"noise floor {'shown' if self.noise else 'hidden'}"

    def do_axis(self) -> str:
        """The whole axis or the audio band."""
        self.axis = Axis(_after(self.axis))
        return f"frequency axis {self.axis}"

    def do_node_volts(self) -> str:
        """DC and peak volts at the nodes, or not."""
        self.node_volts = not self.node_volts
        self._desk.link.send(ProbeNodes(self.node_volts))
        return f"volts at the nodes {'shown' if self.node_volts else 'hidden'}"

    # ---- a drawing larger than its panel ----

    def pan_by(self, columns: int, lines: int) -> None:
        """Move the drawing; the panel stops at its edges."""
        self.pan = (self.pan[0] + columns, self.pan[1] + lines)

    def do_pan_left(self) -> None:
        """What lies to the left."""
        self.pan_by(-PAN_COLUMNS, 0)

    def do_pan_right(self) -> None:
        """What lies to the right."""
        self.pan_by(PAN_COLUMNS, 0)

    def do_pan_up(self) -> None:
        """What lies above."""
        self.pan_by(0, -PAN_LINES)

    def do_pan_down(self) -> None:
        """What lies below."""
        self.pan_by(0, PAN_LINES)

    # ---- the cursor of the response ----

    def put_cursor(self, frequency_hz: float) -> str:
        """Put the cursor at a frequency, within the widest axis."""
        low_hz, high_hz = Axis.WIDE.ends_hz
        self.cursor_hz = min(max(frequency_hz, low_hz), high_hz)
        return f"cursor at {hertz(self.cursor_hz)}"

    def _first_place_hz(self) -> float:
        """Where the cursor begins: at the first corner, or at 1 kHz."""
        now = self._desk.figures.now
        return now.corners_hz[0] if now is not None and now.corners_hz else 1e3

    def do_cursor_up(self) -> str:
        """The cursor a twelfth of an octave up."""
        place_hz = self.cursor_hz
        return self.put_cursor(self._first_place_hz() if place_hz is None else place_hz * CURSOR_STEP_RATIO)

    def do_cursor_down(self) -> str:
        """The cursor a twelfth of an octave down."""
        place_hz = self.cursor_hz
        return self.put_cursor(self._first_place_hz() if place_hz is None else place_hz / CURSOR_STEP_RATIO)

    def do_cursor_off(self) -> str:
        """No cursor, or one at the corner."""
        if self.cursor_hz is None:
            return self.put_cursor(self._first_place_hz())
        self.cursor_hz = None
        return "no cursor"
