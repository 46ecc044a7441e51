"""What a check is given and what it finds; plain data that goes from process to process and into a record."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

from preview.audio.logs import LogFormat
from preview.dsp.events import LimitEvent
from preview.session import Session
from preview.values.levels import FullScale, parse_full_scale

__all__ = [
    "CheckPlan",
    "FileCheck",
    "FileFailure",
    "LevelsRead",
    "Limit",
    "Margin",
    "OpAmpCheck",
    "TraceRead",
]

Limit = Literal["rail", "slew rate", "output current", "input range"]
"""What bounds the largest clean input."""
Proof = Literal["whole file", "linear", "loudest passages"]
"""``whole file``: all of it ran clean at that level. ``linear``: it ran clean as it is, where the circuit is linear,
and its loudest passages at that level. ``loudest passages``: only these ran clean."""


@dataclass(frozen=True, slots=True)
class CheckPlan:
    """What every recording of one check is put through."""

    session: Session
    """Stage, supply, source, load and quality."""
    full_scale: FullScale | None
    """Full scale where the options state one; else the recording's own comment, else the session's."""
    per_unit: FullScale | None = None
    """Volts of one unit of a log, where the options state them."""
    log_scale: FullScale = field(default_factory=lambda: parse_full_scale("1 V"))
    """Volts of one unit of a log where nothing states them."""
    log: LogFormat = field(default_factory=LogFormat)
    """How logs of numbers are read."""
    settled: bool = False
    """Whether the first value of a recording was there long before it; that of a log always was."""
    margin: bool = True
    """Whether the largest clean input is looked for."""


@dataclass(frozen=True, slots=True)
class LevelsRead:
    """Levels of a signal over a whole recording, the highest channel where there are several."""

    peak_v: float
    """Largest magnitude of a sample [V]."""
    true_peak_v: float
    """Largest magnitude between the samples too [V]."""
    rms_v: float
    """RMS of the loudest channel [V]."""
    crest_db: float
    """Peak over RMS of the channel in which it is largest [dB]; nan for silence."""
    dc_v: float
    """Mean of the channel in which its magnitude is largest [V]."""
    loudness_lufs: float
    """Integrated loudness [LUFS]; -inf for silence, nan where the rate is too low for it."""
    loudness_range_lu: float
    """Loudness range [LU]; nan likewise."""


@dataclass(frozen=True, slots=True)
class OpAmpCheck:
    """What one op-amp did over a recording, worst channel where there are several."""

    name: str
    """U1, U2 ..."""
    peak_v: float
    """Largest magnitude of its output [V]."""
    high_v: float
    """Largest output [V]."""
    low_v: float
    """Smallest output [V]."""
    high_limit_v: float
    """Highest output that it can give, at its lightest load [V]; inf without a rail."""
    low_limit_v: float
    """Lowest output that it can give, at its lightest load [V]."""
    rest_v: float
    """Output without a signal [V]."""
    headroom_db: float
    """How much more signal it takes before it comes to a rail, under its load [dB]; 0 at it, inf without one."""
    clip_events: int
    """Visits to a rail, all channels together."""
    clipped_s: float
    """Time at a rail, all channels together [s]."""
    worst_s: float
    """When it was worst: its longest visit to a rail, else its peak [s]; nan without a signal."""
    slew_peak_v_per_s: float
    """Fastest change of its output [V/s]."""
    slew_limit_v_per_s: float
    """Limit of its type [V/s]; inf where it has none."""
    slew_events: int
    """Times that it slewed, all channels together."""
    slewed_s: float
    """Time in which it slewed, whole frames, all channels together [s]."""
    current_peak_a: float
    """Largest magnitude of its output current [A]."""
    current_limit_a: float
    """Limit of its type [A]; inf where it has none."""
    current_events: int
    """Visits to its largest output current, all channels together."""
    current_limited_s: float
    """Time at its largest output current, all channels together [s]."""
    input_range_events: int
    """Visits of its + input outside the common-mode range, all channels together."""
    input_range_s: float
    """Time that its + input was there, all channels together [s]."""
    unsolved_steps: int
    """Steps whose limits could not be solved to tolerance; 0 in a healthy run."""


@dataclass(frozen=True, slots=True)
class Margin:
    """The largest input that stays clean, by running scaled copies of the recording."""

    gain_db: float
    """How much more (below 0: less) of this recording stays clean [dB]."""
    limited_by: str
    """The op-amp that limits first beyond it."""
    limit: Limit
    """What it comes to."""
    proof: Proof
    """How much of the recording was run to find it."""


@dataclass(frozen=True, slots=True)
class TraceRead:
    """Levels over time, and how long how much headroom was left."""

    step_s: float
    """Time from one entry to the next [s]."""
    input_peak_v: tuple[float, ...]
    """Largest magnitude at the input in each [V]."""
    output_peak_v: tuple[float, ...]
    """Largest magnitude at the output in each [V]."""
    headroom_db: tuple[tuple[float, ...], ...]
    """Headroom of each op-amp in each [dB]."""
    headroom_s: tuple[tuple[float, ...], ...]
    """For each op-amp: time with a headroom of 0..1 dB, 1..2 dB ... and, last, more [s]."""


@dataclass(frozen=True, slots=True)
class FileFailure:
    """A recording that could not be checked."""

    path: str
    """The file."""
    message: str
    """Why, in one line."""
    hint: str
    """What to do about it."""
    exit_code: int
    """Exit code of this kind of error."""


@dataclass(frozen=True, slots=True)
class FileCheck:
    """The result of one recording."""

    path: str
    """The file."""
    sample_rate_hz: float
    """Sample rate [Hz]."""
    frames: int
    """Frames read."""
    channels: int
    """Channels."""
    full_scale_v: float
    """Peak volts of a sample of 1.0 [V]."""
    quality: str
    """Quality of computation."""
    elapsed_s: float
    """Processing time of everything [s]."""
    input: LevelsRead
    """Levels at the stage's input."""
    output: LevelsRead
    """Levels at its output."""
    opamps: tuple[OpAmpCheck, ...]
    """One an op-amp."""
    events: tuple[LimitEvent, ...]
    """Visits to limits in order of their starts, as far as they are kept."""
    margin: Margin | None
    """The largest clean input; None where it was not looked for, or there is none."""
    trace: TraceRead
    """Levels and headroom over time."""
    warnings: tuple[str, ...]
    """What is wrong with the recording but not fatal."""

    @property
    def length_s(self) -> float:
        """Length of the recording [s]."""
        return self.frames / self.sample_rate_hz

    @property
    def realtime_ratio(self) -> float:
        """Signal time per processing time."""
        return self.length_s / max(self.elapsed_s, 1e-9)

    @property
    def event_count(self) -> int:
        """Visits to limits, those without times included."""
        return sum(
            o.clip_events + o.slew_events + o.current_events + o.input_range_events for o in self.opamps
        )
