"""Opening what is heard: a recording, a test signal, or the sound device's input."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from preview.audio import devices
from preview.audio.live import LiveReader
from preview.audio.prefetch import Prefetch
from preview.audio.signals import SignalSource
from preview.audio.source import FileSource
from preview.audio.stream import Inlet
from preview.engine.readings import InputKind
from preview.engine.transport import Reader
from preview.errors import AudioFileError, DeviceError
from preview.session import Session
from preview.values.stimulus import STIMULUS_RATE_HZ, Stimulus

__all__ = ["Intake", "open_file", "open_live", "open_session", "open_signal"]

_LIVE_CHANNELS = 2


class _ClosingReader(Reader, Protocol):
    def close(self) -> None:
        """Let go of what is read."""


@dataclass(frozen=True, slots=True)
class Intake:
    """Something that can be heard, open."""

    reader: _ClosingReader
    """Its frames."""
    sample_rate_hz: float
    """Its rate [Hz]."""
    channels: int
    """Its channels."""
    kind: InputKind
    """Where it comes from."""
    name: str
    """What it is, in words."""
    path: Path | None = None
    """The file."""
    stimulus: Stimulus | None = None
    """The test signal; its samples are volts."""
    inlet: Inlet | None = None
    """What the output must record."""
    warnings: tuple[str, ...] = ()
    """What is wrong but not fatal, one line each."""

    @property
    def error(self) -> AudioFileError | None:
        """The damage at which a file had to be given up."""
        return self.reader.error if isinstance(self.reader, Prefetch) else None

    @property
    def live(self) -> LiveReader | None:
        """The live input, None for anything else."""
        return self.reader if isinstance(self.reader, LiveReader) else None


def open_session(session: Session, *, loop: bool, output_device: str | None) -> Intake | None:
    """What the session hears, None where it hears nothing yet; raises AudioFileError."""
    if session.live:
        return open_live(session.live_device, output_device)
    if session.stimulus is not None:
        return open_signal(session.stimulus)
    return open_file(session.audio, loop=loop) if session.audio is not None else None


def open_file(path: Path, *, loop: bool) -> Intake:
    """A recording; raises AudioFileError."""
    source = FileSource(path)
    return Intake(
        Prefetch(source, loop=loop),
        source.sample_rate_hz,
        source.channels,
        InputKind.FILE,
        path.name,
        path=path,
        warnings=source.warnings,
    )


def open_signal(stimulus: Stimulus) -> Intake:
    """A test signal."""
    return Intake(
        Prefetch(SignalSource(stimulus)),
        STIMULUS_RATE_HZ,
        SignalSource.channels,
        InputKind.SIGNAL,
        stimulus.text,
        stimulus=stimulus,
    )


def open_live(device: str | None, output_device: str | None) -> Intake:
    """The sound device's input, at the output's own rate; one that is not there is told when it is opened."""
    rate_hz, channels, name = float(STIMULUS_RATE_HZ), _LIVE_CHANNELS, device or "default input"
    try:
        outputs = devices.output_devices()
        chosen = devices.find_output(output_device) if output_device is not None else None
        chosen = chosen or next((one for one in outputs if one.is_default), None)
        rate_hz = chosen.default_sample_rate_hz if chosen is not None else rate_hz
        inputs = [one for one in devices.all_devices() if one.is_default_input]
        source = devices.find_input(device) if device is not None else next(iter(inputs), None)
        if source is not None:
            channels, name = min(source.max_input_channels, _LIVE_CHANNELS), source.name
    except DeviceError:
        pass  # the output says so when it does not open
    reader = LiveReader(rate_hz, channels)
    inlet = Inlet(device, channels, reader.take)
    return Intake(reader, rate_hz, channels, InputKind.LIVE, name, inlet=inlet)
