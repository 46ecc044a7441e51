"""What the engine reads and finds out, as plain frozen data for the desk."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Literal

from preview.circuit.fault import FaultReading

__all__ = [
    "CandidateReading",
    "ClipMarks",
    "DeviceList",
    "DeviceRow",
    "ExportState",
    "FaultReading",
    "InputKind",
    "NodePeaks",
    "OpAmpMarks",
    "Overview",
    "Report",
    "SpectrumReading",
]


class InputKind(StrEnum):
    """Where the signal comes from."""

    FILE = "file"
    """A recording."""
    SIGNAL = "signal"
    """A built-in test signal."""
    LIVE = "live"
    """The sound device's input."""


@dataclass(frozen=True, slots=True)
class SpectrumReading:
    """The spectrum in 1/6-octave bands (IEC 61260-1, base ten), of the louder channel in each band."""

    center_hz: tuple[float, ...]
    """Exact mid-band frequencies [Hz]."""
    input_vrms: tuple[float, ...]
    """RMS of each band at the stage's input [V]."""
    output_vrms: tuple[float, ...]
    """RMS of each band at the stage's output [V]."""


@dataclass(frozen=True, slots=True)
class CandidateReading:
    """One candidate."""

    letter: str
    """A, B, C ..."""
    ready: bool
    """Whether it can be heard at once."""
    loudness_lufs: float | None
    """Integrated loudness of its output over the file or loop region, full scale as 0 dBFS; None if not yet known."""
    match_db: float
    """Gain at which it is heard while loudness is matched [dB], at most 0."""


@dataclass(frozen=True, slots=True)
class Overview:
    """The waveform of the recording, column by column; built from the start, so it may be shorter than whole."""

    frames: int
    """Length of the recording [frames]."""
    columns: int
    """Columns of the whole."""
    low: tuple[float, ...]
    """Smallest sample of each column done so far, of all channels, as a share of full scale."""
    high: tuple[float, ...]
    """Largest sample of each column done so far."""

    @property
    def done_ratio(self) -> float:
        """Share of the whole that is done."""
        return len(self.low) / self.columns if self.columns else 1.0


@dataclass(frozen=True, slots=True)
class OpAmpMarks:
    """Where one op-amp clips."""

    designator: str
    """U1, U2 ..."""
    spans: tuple[tuple[int, int], ...]
    """First frame and frame after the last of each passage that clips; nearer than 10 ms is one passage."""
    asked_high_v: float | None = None
    """Highest output that the whole recording asks for, were there no limits [V]; None as long as it is not known."""
    asked_low_v: float | None = None
    """Lowest output that it asks for [V]."""
    asked_slew_v_per_s: float | None = None
    """Fastest change of the output that it asks for [V/s]."""


@dataclass(frozen=True, slots=True)
class ClipMarks:
    """Where the circuit clips in the recording, of the candidate that is heard; built from the start."""

    letter: str
    """The candidate."""
    frames: int
    """Length of the recording [frames]."""
    done_frames: int
    """Looked through so far [frames]."""
    opamps: tuple[OpAmpMarks, ...]
    """One entry an op-amp."""


@dataclass(frozen=True, slots=True)
class NodePeaks:
    """Extremes of the voltage at the inner nodes of the candidate that is heard: of those that no meter reads.

    Over the recording or its loop region, one sweep or 10 s of a test signal, the last 10 s of live input.
    """

    letter: str
    """The candidate."""
    nodes: tuple[str, ...]
    """The nodes."""
    high_v: tuple[float, ...]
    """Highest voltage at each so far [V]."""
    low_v: tuple[float, ...]
    """Lowest [V]."""
    done_ratio: float
    """Share of the whole that is done."""


@dataclass(frozen=True, slots=True)
class DeviceRow:
    """A sound device, kept by name and host API."""

    name: str
    """Its name, as ``SetDevice`` and ``UseLive`` take it."""
    host_api: str
    """The system interface that offers it."""
    input_channels: int
    """Most channels it records."""
    output_channels: int
    """Most channels it plays."""
    sample_rate_hz: float
    """The rate it prefers [Hz]."""
    default_input: bool
    """Whether the system records from it by default."""
    default_output: bool
    """Whether the system plays through it by default."""


@dataclass(frozen=True, slots=True)
class DeviceList:
    """The answer to ``RescanDevices``."""

    devices: tuple[DeviceRow, ...]
    """Every device there is now."""
    trouble: str = ""
    """Why none could be listed; empty where all went well."""


@dataclass(frozen=True, slots=True)
class ExportState:
    """How far an export is."""

    out: str
    """The file."""
    done_frames: int
    """Frames written."""
    frames: int
    """Frames in all; 0 where that is not known, as of live input that is recorded."""
    state: Literal["running", "done", "failed", "cancelled"]
    """What became of it."""
    text: str = ""
    """One line for the person: what was written, or why not."""
    hidden: str = ""
    """Where it stands until it is whole."""
    readable: bool = False
    """Whether it can be read there, up to ``done_frames``."""


Report = Overview | ClipMarks | NodePeaks | DeviceList | ExportState
"""What is told when it is found out; the newest of a kind replaces one still waiting."""
