"""What the desk and the engine tell each other. Plain frozen data, pickled over a pipe.

The desk sends commands; the engine sends snapshots (the newest replaces one still waiting) and notices.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpReading
from preview.meters.reading import LevelReading
from preview.session import AtEnd
from preview.values.quality import Quality

__all__ = [
    "ClearHolds",
    "Command",
    "Notice",
    "OpenFile",
    "Pause",
    "Play",
    "Quit",
    "Seek",
    "SetAtEnd",
    "SetBypass",
    "SetCircuit",
    "SetFullScale",
    "SetPart",
    "SetQuality",
    "SetRegion",
    "SetVolume",
    "Snapshot",
]


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


Command = (
    SetPart
    | SetCircuit
    | SetQuality
    | SetFullScale
    | OpenFile
    | Play
    | Pause
    | Seek
    | SetRegion
    | SetAtEnd
    | SetBypass
    | SetVolume
    | ClearHolds
    | Quit
)


@dataclass(frozen=True, slots=True)
class Notice:
    """Something the person should read: a lost device, a file that cannot be opened."""

    text: str
    """One line."""
    severity: str = "information"
    """``information``, ``warning`` or ``error``."""


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The state of the engine, sent about 30 times a second."""

    playing: bool
    """Whether sound runs."""
    position_frame: int
    """Frame of the file now being heard."""
    frames: int
    """Length of the file in frames."""
    sample_rate_hz: float
    """Sample rate of the file [Hz]."""
    region: tuple[int, int] | None
    """First frame and frame after the last of the loop region."""
    at_end: AtEnd
    """What happens at the end."""
    input: LevelReading
    """At the stage's input, in volts."""
    output: LevelReading
    """At the stage's output, in volts."""
    opamps: tuple[OpAmpReading, ...]
    """One reading an op-amp, since the holds were cleared."""
    bypass: bool
    """Whether the input is heard."""
    volume_db: float
    """Listening volume [dB]."""
    quality: Quality
    """Quality in force."""
    full_scale_v: float
    """Peak volts of full scale."""
    limited_blocks: int
    """Blocks in which the safety limit before the device had to act, since the holds were cleared."""
    dropouts: int
    """Blocks that the device missed, since the holds were cleared."""
    load_ratio: float
    """Time spent computing as a share of real time, smoothed."""
    latency_s: float
    """From a sample's computation to the device [s]."""
    output_name: str
    """Device, or ``silent clock``."""
    gliding: bool
    """Whether a part is on its way to a new value."""
