"""What the desk and the engine tell each other. Plain frozen data, pickled over a pipe.

The desk sends commands; the engine sends snapshots (the newest replaces one still waiting), reports (the newest of a
kind replaces one still waiting) and notices.
"""

from __future__ import annotations

from dataclasses import dataclass

from preview.circuit.opamp import OpAmpReading
from preview.engine.commands import (
    CancelExport,
    ClearHolds,
    Command,
    DropCandidate,
    Export,
    ExportDepth,
    KeepCandidate,
    ListenNull,
    OpenFile,
    Pause,
    Play,
    ProbeNodes,
    Quit,
    Recover,
    RescanDevices,
    Seek,
    SelectCandidate,
    SetAtEnd,
    SetBypass,
    SetCircuit,
    SetDevice,
    SetFullScale,
    SetHeardChannels,
    SetMatch,
    SetMute,
    SetPart,
    SetQuality,
    SetRegion,
    SetVolume,
    UseLive,
    UseSignal,
)
from preview.engine.readings import (
    CandidateReading,
    ClipMarks,
    DeviceList,
    DeviceRow,
    ExportState,
    FaultReading,
    InputKind,
    NodePeaks,
    OpAmpMarks,
    Overview,
    Report,
    SpectrumReading,
)
from preview.meters.reading import LevelReading
from preview.session import AtEnd
from preview.values.quality import Quality

__all__ = [
    "CancelExport",
    "CandidateReading",
    "ClearHolds",
    "ClipMarks",
    "Command",
    "DeviceList",
    "DeviceRow",
    "DropCandidate",
    "Export",
    "ExportDepth",
    "ExportState",
    "FaultReading",
    "InputKind",
    "KeepCandidate",
    "ListenNull",
    "NodePeaks",
    "Notice",
    "OpAmpMarks",
    "OpenFile",
    "Overview",
    "Pause",
    "Play",
    "ProbeNodes",
    "Quit",
    "Recover",
    "Report",
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
    "Snapshot",
    "SpectrumReading",
    "UseLive",
    "UseSignal",
]


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
    opamp_peaks_v: tuple[float, ...] = ()
    """Largest output voltage of each of ``opamps`` since the last snapshot [V]."""
    input_kind: InputKind = InputKind.FILE
    """Where the signal comes from. Live input and an endless signal have a length of 0 frames."""
    input_name: str = ""
    """File, test signal or input device, in words."""
    channels: int = 2
    """Channels of the input."""
    heard_channels: tuple[int, ...] = ()
    """Channels that are heard, from 0; empty where all are."""
    muted: bool = False
    """Whether the device is silent though everything runs."""
    mute_reason: str = ""
    """Why it was muted without being asked to: howl-round, a fault; empty otherwise."""
    fault: FaultReading | None = None
    """Why the circuit was muted; ``Recover`` clears it."""
    live_latency_s: float = 0.0
    """From the input device to the output device [s]; 0 but for live input."""
    spectrum: SpectrumReading | None = None
    """Input and output of the last half second; None before the first."""
    letter: str = "A"
    """The candidate that is heard."""
    null: tuple[str, str] | None = None
    """The first candidate minus the second is heard; then ``output`` is their difference."""
    match: bool = False
    """Whether candidates are heard at matched loudness."""
    match_db: float = 0.0
    """Gain of the match now in force [dB]; levels in volts do not depend on it."""
    candidates: tuple[CandidateReading, ...] = ()
    """Every candidate, by letter."""
