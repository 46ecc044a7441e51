"""What the desk tells the engine. Plain frozen data, pickled over a pipe.

The engine runs up to 26 candidates, lettered ``A`` to ``Z``; it begins with one, ``A``. ``SetPart``, ``SetCircuit`` and
``SetQuality`` are for the candidate that is heard.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from preview.circuit.netlist import Netlist
from preview.session import AtEnd, Session
from preview.values.quality import Quality
from preview.values.stimulus import Stimulus

__all__ = [
    "CancelExport",
    "ClearHolds",
    "Command",
    "DropCandidate",
    "Export",
    "ExportDepth",
    "KeepCandidate",
    "ListenNull",
    "OpenFile",
    "Pause",
    "Play",
    "ProbeNodes",
    "Quit",
    "Recover",
    "RescanDevices",
    "Seek",
    "SelectCandidate",
    "SetAtEnd",
    "SetBypass",
    "SetCircuit",
    "SetDevice",
    "SetFullScale",
    "SetHeardChannels",
    "SetMatch",
    "SetMute",
    "SetPart",
    "SetQuality",
    "SetRegion",
    "SetVolume",
    "UseLive",
    "UseSignal",
]

ExportDepth = Literal["16", "24", "float"]
"""Sample format of an exported file."""


@dataclass(frozen=True, slots=True)
class SetPart:
    """Glide one part to a new value."""

    designator: str
    """R1, C2 ..."""
    value: float
    """Ohm, farad or henry."""


@dataclass(frozen=True, slots=True)
class SetCircuit:
    """Crossfade to another circuit (other stage, supply, source, load)."""

    netlist: Netlist
    """The new circuit, checked."""


@dataclass(frozen=True, slots=True)
class SetQuality:
    """Crossfade to another quality of computation."""

    quality: Quality
    """The new quality."""


@dataclass(frozen=True, slots=True)
class SetFullScale:
    """Change the volts a sample of 1.0 stands for."""

    full_scale_v: float
    """Peak volts of full scale."""


@dataclass(frozen=True, slots=True)
class OpenFile:
    """Open another recording; it waits at its start."""

    path: Path
    """The file."""


@dataclass(frozen=True, slots=True)
class Play:
    """Start or go on."""


@dataclass(frozen=True, slots=True)
class Pause:
    """Fade out and wait."""


@dataclass(frozen=True, slots=True)
class Seek:
    """Go to a frame of the recording."""

    frame: int
    """Frame of the file, 0 at its start."""


@dataclass(frozen=True, slots=True)
class SetRegion:
    """Play within a region; both None for the whole file."""

    start_frame: int | None
    """First frame."""
    end_frame: int | None
    """Frame after the last."""


@dataclass(frozen=True, slots=True)
class SetAtEnd:
    """What happens at the end of the file or region."""

    at_end: AtEnd
    """Loop or stop."""


@dataclass(frozen=True, slots=True)
class SetBypass:
    """Hear the input instead of the stage's output."""

    on: bool
    """True to bypass the stage."""


@dataclass(frozen=True, slots=True)
class SetVolume:
    """Listening volume; levels in volts do not depend on it."""

    volume_db: float
    """Gain to the device [dB], at most 0; -inf is silence."""


@dataclass(frozen=True, slots=True)
class ClearHolds:
    """Clear peak holds, clip counts and dropout count."""


@dataclass(frozen=True, slots=True)
class Quit:
    """Fade out and end the engine."""


@dataclass(frozen=True, slots=True)
class UseSignal:
    """Take a test signal for the input; it waits at its start."""

    stimulus: Stimulus
    """The signal, in volts: it does not depend on the full scale."""


@dataclass(frozen=True, slots=True)
class UseLive:
    """Take live input; it begins muted (``SetMute(False)`` lets it be heard)."""

    device: str | None = None
    """Input device by name; None for the default."""


@dataclass(frozen=True, slots=True)
class SetMute:
    """Silence the device while everything goes on running and the meters read, or end that."""

    on: bool
    """True to mute."""


@dataclass(frozen=True, slots=True)
class SetHeardChannels:
    """Which channels of a recording with more channels than the device are heard."""

    channels: tuple[int, ...]
    """Channels of the recording, from 0, for the device's first, second ... channel."""


@dataclass(frozen=True, slots=True)
class SetDevice:
    """Play through another device; a short silence."""

    name: str | None
    """Output device by name; None for the default."""


@dataclass(frozen=True, slots=True)
class RescanDevices:
    """Look for devices anew, without touching the sound; the answer is a ``DeviceList``."""


@dataclass(frozen=True, slots=True)
class KeepCandidate:
    """Add a candidate, or replace one of that letter; it is prepared in the background and not yet heard."""

    letter: str
    """A, B, C ..."""
    netlist: Netlist
    """Its circuit, checked."""


@dataclass(frozen=True, slots=True)
class SelectCandidate:
    """Hear this candidate from now on, without a gap; ends null listening."""

    letter: str
    """A letter that was kept."""


@dataclass(frozen=True, slots=True)
class DropCandidate:
    """Forget a candidate; the one that is heard stays."""

    letter: str
    """A letter that was kept."""


@dataclass(frozen=True, slots=True)
class SetMatch:
    """Hear every candidate at the loudness of the quietest one (BS.1770), or each as it is."""

    on: bool
    """True to match."""


@dataclass(frozen=True, slots=True)
class ListenNull:
    """Hear one candidate minus another, at matched loudness while ``SetMatch`` is on; None ends it."""

    pair: tuple[str, str] | None
    """Letters: the first minus the second."""


@dataclass(frozen=True, slots=True)
class Recover:
    """Bring a circuit back that was muted because its computation failed: from rest, then heard again."""


@dataclass(frozen=True, slots=True)
class Export:
    """Write what is heard to a file, in the background; ``ExportState`` tells how far it is.

    Live input is recorded from now on, as the stage puts it out, until ``CancelExport`` or half an hour later.
    """

    session: Session
    """The candidate to export, as heard now."""
    out: Path
    """The file; its ending says what is written. A file that is there is replaced."""
    depth: ExportDepth = "float"
    """Sample format."""
    region: tuple[int, int] | None = None
    """First frame and frame after the last; None for all of the file, one sweep, or 10 s of a test signal."""


@dataclass(frozen=True, slots=True)
class ProbeNodes:
    """Find the peaks at the inner nodes of what is heard, and anew when that changes; ``NodePeaks`` tells them."""

    on: bool
    """False to leave off."""


@dataclass(frozen=True, slots=True)
class CancelExport:
    """Stop the export; nothing is left behind. A recording of live input ends, and what was recorded stays."""


Command = (
    SetPart
    | SetCircuit
    | SetQuality
    | SetFullScale
    | OpenFile
    | UseSignal
    | UseLive
    | Play
    | Pause
    | Seek
    | SetRegion
    | SetAtEnd
    | SetBypass
    | SetVolume
    | SetMute
    | SetHeardChannels
    | SetDevice
    | RescanDevices
    | KeepCandidate
    | SelectCandidate
    | DropCandidate
    | SetMatch
    | ListenNull
    | Recover
    | Export
    | CancelExport
    | ProbeNodes
    | ClearHolds
    | Quit
)
