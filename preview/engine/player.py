"""The player: fills the device's blocks from the recording, through the circuit, without ever waiting."""

from __future__ import annotations

import math
import time
from collections import deque
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from preview.circuit.opamp import OpAmpReading
from preview.engine.loop import Circuit, Meter, Samples, SignalPath, joined_readings, peak, spread
from preview.engine.messages import Snapshot
from preview.engine.transport import Mode, Playhead, Ramp, Reader, gain_of
from preview.session import AtEnd
from preview.values.quality import Quality

__all__ = ["Player"]

START_VOLUME_DB = -20.0
RAMP_S = 0.010
VOLUME_RAMP_S = 0.020
WARM_S = 0.020
HANDOVER_S = 0.030
REPORTS_PER_S = 30


class Player:
    """Plays a recording through a circuit; ``fill`` is for the audio thread, the rest for the control thread.

    Parameters
    ----------
    reader : Reader
        The recording.
    sample_rate_hz : float
        Its sample rate [Hz].
    channels : int
        Its channels.
    full_scale_v : float
        Peak volts of a sample of 1.0.
    meters : tuple of Meter
        At the stage's input and at its output.
    quality : Quality
        Quality of computation, as reported.
    volume_db : float
        Listening volume at the start [dB].
    max_frames : int
        Longest block that is computed at once.
    settle_s : float
        Silence after the first circuit has come, in which a device gets over the stalls of loading [s].
    """

    def __init__(
        self,
        reader: Reader,
        *,
        sample_rate_hz: float,
        channels: int,
        full_scale_v: float,
        meters: tuple[Meter, Meter],
        quality: Quality = Quality.STANDARD,
        volume_db: float = START_VOLUME_DB,
        max_frames: int = 2048,
        settle_s: float = 0.0,
    ) -> None:
        self.sample_rate_hz = sample_rate_hz
        self.channels = channels
        self.max_frames = max_frames
        self.mode = Mode.IDLE
        self.inbox: deque[Callable[[], None]] = deque()
        self.snapshot: Snapshot | None = None
        self.output_name = ""
        self.latency_s = 0.0
        self.missed_blocks = 0
        self.faults: deque[str] = deque(maxlen=8)
        self.quality = quality
        self._head = Playhead(reader)
        self._path: SignalPath | None = None
        self.full_scale_v = full_scale_v
        self._input_meter, self._output_meter = meters
        self.bypass = False
        self.volume_db = volume_db
        self._volume = Ramp(max(round(VOLUME_RAMP_S * sample_rate_hz), 1), gain_of(volume_db))
        self._fade = Ramp(max(round(RAMP_S * sample_rate_hz), 1), 0.0)
        self._warm_in = Ramp(max(round(WARM_S * sample_rate_hz), 1), 1.0)
        self._warm_left = 0
        self._settle_left = round(settle_s * sample_rate_hz)
        self._when_silent: deque[Callable[[], None]] = deque()
        self._wants_play = False
        self._samples_in: Samples = np.zeros((max_frames, channels))
        self._samples_out: Samples = np.zeros((max_frames, channels))
        self._silence: Samples = np.zeros((max_frames, channels))
        self._earlier: tuple[OpAmpReading, ...] = ()
        self._new_output_frames = self._limited_blocks = 0
        self._load_ratio = 0.0
        self._since_report = 0
        self._report_frames = max(round(sample_rate_hz / REPORTS_PER_S), 1)

    # -- control thread: carried out at the start of the next block

    def play(self) -> None:
        """Start or go on."""
        self.inbox.append(self._start)

    def pause(self) -> None:
        """Fade out and wait."""

        def halt() -> None:
            self._wants_play = False
            self._to_silence()

        self.inbox.append(halt)

    def seek(self, frame: int) -> None:
        """Go to a frame."""

        def change() -> None:
            self._head.first_frame = min(max(frame, 0), self._head.reader.frames)

        self._in_silence(change)

    def set_region(self, start: int | None, end: int | None) -> None:
        """Keep to a region; both None for the whole. What plays inside it plays on without a gap."""

        def change() -> None:
            self._head.reader.set_region(start, end, self._head.reader.loop)
            first, last = self._head.bounds
            if not first <= self._head.first_frame < last:
                self._head.rewind()

        def order() -> None:
            inside = (start or 0) <= self._position() and (end is None or self._head.reader.position < end)
            if inside and not self.silent:
                self._head.reader.set_region(start, end, self._head.reader.loop)
            else:
                self._when_silent.append(change)
                self._to_silence()

        self.inbox.append(order)

    def set_at_end(self, at_end: AtEnd) -> None:
        """Loop or stop at the end."""

        def change() -> None:
            first, last = self._head.reader.region or (None, None)
            self._head.reader.set_region(first, last, at_end is AtEnd.LOOP)
            self._head.tail_frames = 0

        self.inbox.append(change)

    def set_bypass(self, on: bool) -> None:
        """Hear the input instead of the stage's output."""

        def change() -> None:
            self.bypass = on
            self._begin_output_hold()
            if self._path is not None:
                self._path.circuit.set_bypass(on)

        self.inbox.append(change)

    def set_volume(self, volume_db: float) -> None:
        """Listening volume, at most 0 dB."""

        def change() -> None:
            self.volume_db = min(volume_db, 0.0) if not math.isnan(volume_db) else self.volume_db
            self._volume.to(gain_of(self.volume_db))

        self.inbox.append(change)

    def set_full_scale(self, full_scale_v: float) -> None:
        """Change the volts of a sample of 1.0, in a short silence."""

        def change() -> None:
            self.full_scale_v = full_scale_v
            self._input_meter.clear_hold()
            self._output_meter.clear_hold()
            if self._path is not None:
                self._path.full_scale_v = full_scale_v

        self._in_silence(change)

    def clear_holds(self) -> None:
        """Clear peak holds, clip counts and dropouts."""

        def clear() -> None:
            self._earlier = ()
            self._limited_blocks = self._head.late_reads = self.missed_blocks = 0
            self._input_meter.clear_hold()
            self._output_meter.clear_hold()
            if self._path is not None:
                self._path.circuit.clear_readings()

        self.inbox.append(clear)

    @property
    def silent(self) -> bool:
        """Whether nothing is heard."""
        return self.mode not in (Mode.RUNNING, Mode.FADING)

    # -- audio thread

    def take_circuit(self, circuit: Circuit, quality: Quality) -> None:
        """Run this circuit from now on."""
        self._path = SignalPath(
            circuit, channels=self.channels, full_scale_v=self.full_scale_v, max_frames=self.max_frames
        )
        circuit.set_bypass(self.bypass)
        self.quality = quality
        self._head.late_reads = self.missed_blocks = 0

    def circuit_changed(self, quality: Quality) -> None:
        """The running circuit has been exchanged for another: its readings start anew."""
        self.quality = quality
        self._earlier = ()
        self._begin_output_hold()

    def fill(self, out: NDArray[np.float32]) -> None:
        """Fill the device's next block, shape (frames, device channels); never raises, never waits."""
        started_s = time.perf_counter()
        frames = len(out)
        try:
            while self.inbox:
                self.inbox.popleft()()
            for first in range(0, frames, self.max_frames):
                self._fill_part(out[first : first + self.max_frames])
        except Exception as fault:  # an exception here would end the stream: mute and report instead
            out.fill(0.0)
            self._mute(
                f"the computation failed ({type(fault).__name__}: {fault}); muted, play starts it again"
            )
        if frames:
            share = (time.perf_counter() - started_s) * self.sample_rate_hz / frames
            self._load_ratio += 0.05 * (share - self._load_ratio)
        self._since_report += frames
        if self.snapshot is None and self._since_report >= self._report_frames:
            self._since_report = 0
            self.snapshot = self._report()

    def _fill_part(self, out: NDArray[np.float32]) -> None:
        frames = len(out)
        if self._path is not None and self._settle_left > 0:
            self._settle_left -= frames
        elif self.mode is Mode.LOADING and self._path is not None:
            self._warm_when_ready()
        if self.mode is Mode.WARMING:
            self._warm(2 * frames)
        if self.silent or self._path is None:
            out.fill(0.0)
            self._input_meter.feed(self._silence[:frames])
            self._feed_output_meter(self._silence[:frames])
            self._let_glides_end(frames)
            return
        if self.mode is Mode.RUNNING and self._head.tail_frames >= max(self._latency, 1):
            self._wants_play = False
            self._when_silent.append(self._head.rewind)
            self._to_silence()
        self._head.feed(self._samples_in[:frames])
        samples = self._samples_out[:frames]
        volts_in, volts_out = self._path.run(self._samples_in[:frames], samples)
        if not math.isfinite(peak(volts_out)):
            out.fill(0.0)
            self._mute("the computation ran away; muted, play starts it again from rest")
            return
        self._input_meter.feed(volts_in)
        self._feed_output_meter(volts_out)
        self._fade.apply(samples)
        self._volume.apply(samples)
        if peak(samples) > 1.0:
            np.clip(samples, -1.0, 1.0, out=samples)
            self._limited_blocks += 1
        spread(samples, out)
        if self.mode is Mode.FADING and not self._fade.moving:
            self._silence_reached()

    def _begin_output_hold(self) -> None:
        """The output is another signal from now on: its peaks from before are no longer held."""
        self._output_meter.clear_hold()
        self._new_output_frames = round(HANDOVER_S * self.sample_rate_hz) + self._latency

    def _feed_output_meter(self, volts: Samples) -> None:
        """Feed the meter; while one signal fades into another nothing is held."""
        self._output_meter.feed(volts)
        if self._new_output_frames > 0 and self._path is not None:
            self._output_meter.clear_hold()
            if not self._path.circuit.swapping:
                self._new_output_frames -= len(volts)

    @property
    def _latency(self) -> int:
        return self._path.circuit.latency_frames if self._path is not None else 0

    def _start(self) -> None:
        self._wants_play = True
        if self.mode is Mode.IDLE:
            self._load()

    def _load(self) -> None:
        """Ask for the recording from a little before the frame to be heard first."""
        lead = self._head.cue(round(WARM_S * self.sample_rate_hz))
        self._warm_left = lead
        self._warm_in.jump(0.0 if self._head.first_frame > lead else 1.0)
        self._warm_in.to(1.0)
        self.mode = Mode.LOADING

    def _warm_when_ready(self) -> None:
        assert self._path is not None
        if self._head.reader.ready:
            self._earlier = joined_readings(self._earlier, self._path.circuit.readings())
            self._path.circuit.reset()
            self._warm_left += self._latency
            self.mode = Mode.WARMING

    def _warm(self, frames: int) -> None:
        """Run the circuit unheard up to the place to be heard first, at most so many frames."""
        assert self._path is not None
        while frames > 0 and self._warm_left > 0:
            step = min(frames, self._warm_left, self.max_frames)
            self._head.feed(self._samples_in[:step])
            self._warm_in.apply(self._samples_in[:step])
            self._path.run(self._samples_in[:step], self._samples_out[:step])
            self._warm_left -= step
            frames -= step
        if self._warm_left == 0:
            self._path.circuit.clear_readings()
            self._fade.jump(0.0)
            self._fade.to(1.0)
            self.mode = Mode.RUNNING

    def _let_glides_end(self, frames: int) -> None:
        """Silent, but a part or circuit is on its way: let it arrive."""
        path = self._path
        if path is not None and (path.circuit.gliding or path.circuit.swapping):
            path.run(self._silence[:frames], self._samples_out[:frames])

    def _to_silence(self) -> None:
        if self.mode is Mode.RUNNING:
            self._fade.to(0.0)
            self.mode = Mode.FADING
        elif self.mode is not Mode.FADING:
            self._silence_reached()

    def _silence_reached(self) -> None:
        self._head.first_frame = self._position()
        self.mode = Mode.IDLE
        while self._when_silent:
            self._when_silent.popleft()()
        if self._wants_play:
            self._load()

    def _in_silence(self, change: Callable[[], None]) -> None:
        """Post a change that is made after a fade-out; what played goes on after it."""

        def order() -> None:
            self._when_silent.append(change)
            self._to_silence()

        self.inbox.append(order)

    def _mute(self, why: str) -> None:
        self._wants_play = False
        self._when_silent.clear()
        self.mode = Mode.IDLE
        self._head.rewind()
        self.faults.append(why)
        if self._path is not None:
            self._path.circuit.reset()

    def _report(self) -> Snapshot:
        circuit = self._path.circuit if self._path is not None else None
        return Snapshot(
            playing=self._wants_play or self.mode is Mode.FADING,
            position_frame=self._position(),
            frames=self._head.reader.frames,
            sample_rate_hz=self.sample_rate_hz,
            region=self._head.reader.region,
            at_end=AtEnd.LOOP if self._head.reader.loop else AtEnd.STOP,
            input=self._input_meter.read(),
            output=self._output_meter.read(),
            opamps=joined_readings(self._earlier, circuit.readings()) if circuit is not None else (),
            bypass=self.bypass,
            volume_db=self.volume_db,
            quality=self.quality,
            full_scale_v=self.full_scale_v,
            limited_blocks=self._limited_blocks,
            dropouts=self._head.late_reads + self.missed_blocks,
            load_ratio=self._load_ratio,
            latency_s=self.latency_s,
            output_name=self.output_name,
            gliding=circuit is not None and (circuit.gliding or circuit.swapping),
        )

    def _position(self) -> int:
        """Frame of the recording that is heard, or will be first."""
        if self.mode in (Mode.IDLE, Mode.LOADING):
            return self._head.first_frame
        return self._head.heard(self._latency - self._warm_left)
