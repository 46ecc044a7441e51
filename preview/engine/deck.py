"""What the audio thread runs: the recording through the circuit to the device, with a ramp at every edge."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from preview.dsp.block import Volts
from preview.engine.ears import Ears
from preview.engine.loop import LiveCircuit, Samples, SignalPath, peak
from preview.engine.messages import Snapshot
from preview.engine.monitor import Monitor
from preview.engine.readings import FaultReading
from preview.engine.transport import Mode, Playhead, Ramp
from preview.session import AtEnd
from preview.values.levels import ratio_db
from preview.values.quality import Quality

__all__ = ["Deck"]

RAMP_S = 0.010
WARM_S = 0.020
LOOP_MIN_S = 0.010
"""A shorter loop would be a tone above 100 Hz with a direct voltage under it, or nothing but that [s]."""


class Deck:
    """Plays on through a circuit; everything here is for the audio thread.

    Parameters
    ----------
    head : Playhead
        Reads the recording.
    ears : Ears
        Reads the levels.
    monitor : Monitor
        Brings samples to the device.
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels of the recording.
    full_scale_v : float
        Peak volts of a sample of 1.0.
    in_volts : bool
        Whether the recording's samples are volts and not shares of full scale.
    max_frames : int
        Longest block that is computed at once.
    settle_s : float
        Silence after the first circuit has come [s].
    """

    def __init__(
        self,
        head: Playhead,
        ears: Ears,
        monitor: Monitor,
        *,
        sample_rate_hz: float,
        channels: int,
        full_scale_v: float,
        in_volts: bool,
        max_frames: int,
        settle_s: float,
    ) -> None:
        self.head, self.ears, self.monitor = head, ears, monitor
        self.sample_rate_hz, self.channels = sample_rate_hz, channels
        self.full_scale_v, self.max_frames = full_scale_v, max_frames
        self.mode, self.quality = Mode.IDLE, Quality.STANDARD
        self.bypass = False
        self.fault: FaultReading | None = None
        self.told: deque[str] = deque(maxlen=8)
        self.loop_min_frames = math.ceil(LOOP_MIN_S * sample_rate_hz)
        self.circuit: LiveCircuit | None = None
        self.record: Callable[[Volts], None] | None = None
        """Takes what the stage puts out while it plays."""
        self._path: SignalPath | None = None
        self._in_volts = in_volts
        self._fade = Ramp(max(round(RAMP_S * sample_rate_hz), 1), 0.0)
        self._warm_in = Ramp(max(round(WARM_S * sample_rate_hz), 1), 1.0)
        self._warm_left = 0
        self._settle_left = round(settle_s * sample_rate_hz)
        self._when_silent: deque[Callable[[], None]] = deque()
        self._wants_play = self._held = self._played = False
        self._samples_in: Samples = np.zeros((max_frames, channels))
        self._samples_out: Samples = np.zeros((max_frames, channels))
        self._silence: Samples = np.zeros((max_frames, channels))

    # -- orders

    @property
    def silent(self) -> bool:
        """Whether nothing is heard."""
        return self.mode not in (Mode.RUNNING, Mode.FADING)

    def start(self) -> None:
        """Play from where it is."""
        self._wants_play, self._held = True, False
        if not self.monitor.mute_reason:
            self.fault = None
        if self.mode is Mode.IDLE:
            self._load()

    def halt(self) -> None:
        """Fade out and wait."""
        self._wants_play = False
        self._to_silence()

    def hold(self) -> None:
        """Wait where it is, as nobody can hear it."""
        self._held = True
        self._to_silence()

    def release(self) -> None:
        """End ``hold``: what played goes on."""
        if self._held:
            self._held = False
            if self._wants_play:
                self.start()

    def in_silence(self, change: Callable[[], None]) -> None:
        """Make a change after a fade-out; what played goes on after it."""
        self._when_silent.append(change)
        self._to_silence()

    def keep_to(self, start: int | None, end: int | None) -> None:
        """Play within a region, of 10 ms at least; what plays inside it plays on without a gap."""
        reader = self.head.reader
        if start is not None or end is not None:
            shortest = self.loop_min_frames
            last = max(reader.frames if end is None else end, (start or 0) + shortest)
            end = min(last, reader.frames)
            start = max(min(start or 0, end - shortest), 0)

        def change() -> None:
            reader.set_region(start, end, reader.loop)
            self._keep_inside()

        inside = (start or 0) <= self.position() and (end is None or reader.position < end)
        if inside and not self.silent:
            reader.set_region(start, end, reader.loop)
        else:
            self.in_silence(change)

    def _keep_inside(self) -> None:
        """Go to the start of the region if it is left; in silence."""
        first, last = self.head.bounds
        if not first <= self.head.first_frame < last:
            self.head.rewind()

    def end_with(self, at_end: AtEnd) -> None:
        """Loop or stop at the end; what is too short to loop stops."""
        reader = self.head.reader
        first, last = reader.region or (None, None)
        reader.set_region(first, last, at_end is AtEnd.LOOP and reader.frames >= self.loop_min_frames)
        self.head.tail_frames = 0

    def set_bypass(self, on: bool) -> None:
        """Hear the input instead of the stage's output."""
        self.bypass = on
        self.ears.begin_output_hold(self._latency)
        if self.circuit is not None:
            self.circuit.set_bypass(on)

    def set_full_scale(self, full_scale_v: float) -> None:
        """Change the volts of a sample of 1.0; in silence."""
        self.full_scale_v = full_scale_v
        self.ears.clear_levels()
        if self.circuit is not None:
            self._lay_path(self.circuit)

    def take_circuit(self, circuit: LiveCircuit, quality: Quality) -> None:
        """Run this circuit from now on."""
        self.circuit, self.quality = circuit, quality
        self._lay_path(circuit)
        circuit.set_bypass(self.bypass)
        self.head.late_reads = 0

    def circuit_changed(self, quality: Quality) -> None:
        """What is heard is on its way to another circuit: its readings start anew."""
        self.quality = quality
        self.ears.begin_output_hold(self._latency, other_opamps=True)

    def recover(self) -> None:
        """Take a circuit that has failed up again, from rest; in silence."""
        if self.fault is not None and self.circuit is not None:
            self.circuit.reset()
            if self.monitor.mute_reason == self.fault.reason:
                self.monitor.mute(False, at_once=self.silent)
            self.fault = None
            self._wants_play = self._wants_play or self._played

    def give_up(self, why: str) -> None:
        """What comes out is no signal: silence at once, and the circuit back to rest."""
        self.fault = FaultReading("out", self.position() / self.sample_rate_hz, why)
        self.told.append(f"{why}; muted, play starts it again from rest")
        self._wants_play, self._played = False, self._wants_play
        self._when_silent.clear()
        self.mode = Mode.IDLE
        self.head.rewind()
        if self.circuit is not None:
            self.circuit.reset()

    # -- the signal

    def fill(self, out: NDArray[np.float32]) -> None:
        """Fill the next frames, at most ``max_frames``."""
        frames = len(out)
        if self.circuit is not None and self._settle_left > 0:
            self._settle_left -= frames
        elif self.mode is Mode.LOADING and self.circuit is not None:
            self._warm_when_ready(self.circuit)
        if self.mode is Mode.WARMING:
            self._warm(2 * frames)
        if self.silent or self._path is None or self.circuit is None:
            out.fill(0.0)
            silence = self._silence[:frames]
            self.ears.feed(silence, silence, swapping=False)
            self._let_glides_end(frames)
            return
        if self.mode is Mode.RUNNING and self.head.reader.strays:
            self.in_silence(self._keep_inside)  # it left a new region before that was ready
        if self.mode is Mode.RUNNING and self.head.tail_frames >= max(self._latency, 1):
            self._wants_play = False
            self.in_silence(self.head.rewind)
        self.head.feed(self._samples_in[:frames])
        samples = self._samples_out[:frames]
        volts_in, volts_out = self._path.run(self._samples_in[:frames], samples)
        if not math.isfinite(peak(volts_out)):
            out.fill(0.0)
            self.give_up("the computation ran away")
            return
        self._look_for_fault(self.circuit)
        self.ears.feed(volts_in, volts_out, swapping=self.circuit.swapping)
        if self.record is not None:
            self.record(volts_out)
        if (heard := self.circuit.heard) is not None:
            np.divide(heard, self.full_scale_v, out=samples)
        self._fade.apply(samples)
        self.monitor.leave(samples, out)
        if self.mode is Mode.FADING and not self._fade.moving:
            self._silence_reached()

    @property
    def _latency(self) -> int:
        return self.circuit.latency_frames if self.circuit is not None else 0

    def _lay_path(self, circuit: LiveCircuit) -> None:
        self._path = SignalPath(
            circuit,
            channels=self.channels,
            full_scale_v=1.0 if self._in_volts else self.full_scale_v,
            out_full_scale_v=self.full_scale_v,
            max_frames=self.max_frames,
        )

    def _look_for_fault(self, circuit: LiveCircuit) -> None:
        """A stage that has given up by itself is faded to silence, and that is said once."""
        fault = circuit.fault
        if self.fault is None and fault is not None:
            self.fault = fault
            self.told.append(f"{fault.node} at {fault.time_s:.3f} s: {fault.reason}; muted")
            self.monitor.mute(True, fault.reason)

    def _load(self) -> None:
        """Ask for the recording from a little before the frame to be heard first."""
        lead = self.head.cue(round(WARM_S * self.sample_rate_hz))
        self._warm_left = lead
        self._warm_in.jump(0.0 if self.head.first_frame > lead else 1.0)
        self._warm_in.to(1.0)
        self.mode = Mode.LOADING

    def _warm_when_ready(self, circuit: LiveCircuit) -> None:
        if self.head.reader.ready:
            self.ears.keep(circuit)
            circuit.reset()
            self._warm_left += self._latency
            self.mode = Mode.WARMING

    def _warm(self, frames: int) -> None:
        """Run the circuit unheard up to the place to be heard first, at most so many frames."""
        assert self._path is not None
        assert self.circuit is not None
        while frames > 0 and self._warm_left > 0:
            step = min(frames, self._warm_left, self.max_frames)
            self.head.feed(self._samples_in[:step])
            self._warm_in.apply(self._samples_in[:step])
            self._path.run(self._samples_in[:step], self._samples_out[:step])
            self._warm_left -= step
            frames -= step
        if self._warm_left == 0:
            self.circuit.clear_readings()
            self._fade.jump(0.0)
            self._fade.to(1.0)
            self.mode = Mode.RUNNING

    def _let_glides_end(self, frames: int) -> None:
        """Silent, but a part or circuit is on its way: let it arrive."""
        circuit = self.circuit
        if circuit is not None and self._path is not None and (circuit.gliding or circuit.swapping):
            self._path.run(self._silence[:frames], self._samples_out[:frames])

    def _to_silence(self) -> None:
        if self.mode is Mode.RUNNING:
            self._fade.to(0.0)
            self.mode = Mode.FADING
        elif self.mode is not Mode.FADING:
            self._silence_reached()

    def _silence_reached(self) -> None:
        self.head.first_frame = self.position()
        self.mode = Mode.IDLE
        while self._when_silent:
            self._when_silent.popleft()()
        if self._wants_play and not self._held:
            self._load()

    def position(self) -> int:
        """Frame of the recording that is heard, or will be first."""
        if self.mode in (Mode.IDLE, Mode.LOADING):
            return self.head.first_frame
        return self.head.heard(self._latency - self._warm_left)

    def report(self, *, dropouts: int, load_ratio: float, latency_s: float, output_name: str) -> Snapshot:
        """The state of everything that is heard."""
        circuit, reader, monitor = self.circuit, self.head.reader, self.monitor
        before, after = self.ears.levels()
        opamps = self.ears.opamps(circuit) if circuit is not None else ()
        return Snapshot(
            playing=(self._wants_play and not self._held) or self.mode is Mode.FADING,
            position_frame=self.position(),
            frames=reader.frames,
            sample_rate_hz=self.sample_rate_hz,
            region=reader.region,
            at_end=AtEnd.LOOP if reader.loop else AtEnd.STOP,
            input=before,
            output=after,
            opamps=opamps,
            opamp_peaks_v=self.ears.opamp_peaks_v,
            bypass=self.bypass,
            volume_db=monitor.volume_db,
            quality=self.quality,
            full_scale_v=self.full_scale_v,
            limited_blocks=monitor.limited_blocks,
            dropouts=self.head.late_reads + dropouts,
            load_ratio=load_ratio,
            latency_s=latency_s,
            output_name=output_name,
            gliding=circuit is not None and (circuit.gliding or circuit.swapping),
            channels=self.channels,
            heard_channels=monitor.heard_channels,
            muted=monitor.muted,
            mute_reason=monitor.mute_reason,
            fault=self.fault,
            letter=circuit.letter if circuit is not None else "A",
            null=circuit.null if circuit is not None else None,
            match_db=ratio_db(circuit.match_gain) if circuit is not None else 0.0,
        )
