"""The player: fills the device's blocks, and takes orders from another thread without either ever waiting."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from preview.dsp.block import Volts
from preview.engine.deck import Deck
from preview.engine.ears import Ears
from preview.engine.loop import LiveCircuit, Meter
from preview.engine.messages import Snapshot
from preview.engine.monitor import START_VOLUME_DB, Monitor
from preview.engine.transport import Playhead, Reader
from preview.session import AtEnd
from preview.values.quality import Quality

__all__ = ["Player"]

REPORTS_PER_S = 30
HURRY_MAX, HURRY_LOAD = 8, 0.7


class Player:
    """Plays a recording through a circuit; ``fill`` is for the audio thread, the rest for the control thread.

    An order is carried out at the start of the next block.

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
    volume_db : float
        Listening volume at the start [dB].
    max_frames : int
        Longest block that is computed at once.
    settle_s : float
        Silence after the first circuit has come, in which a device gets over the stalls of loading [s].
    in_volts : bool
        Whether the recording's samples are volts and not shares of full scale.
    """

    def __init__(
        self,
        reader: Reader,
        *,
        sample_rate_hz: float,
        channels: int,
        full_scale_v: float,
        meters: tuple[Meter, Meter],
        volume_db: float = START_VOLUME_DB,
        max_frames: int = 2048,
        settle_s: float = 0.0,
        in_volts: bool = False,
    ) -> None:
        self.sample_rate_hz = sample_rate_hz
        self.channels = channels
        self.inbox: deque[Callable[[], None]] = deque()
        self.snapshot: Snapshot | None = None
        self.output_name = ""
        self.latency_s = 0.0
        self.missed_blocks = 0
        self.deck = Deck(
            Playhead(reader),
            Ears(meters, sample_rate_hz=sample_rate_hz, channels=channels),
            Monitor(sample_rate_hz, volume_db),
            sample_rate_hz=sample_rate_hz,
            channels=channels,
            full_scale_v=full_scale_v,
            in_volts=in_volts,
            max_frames=max_frames,
            settle_s=settle_s,
        )
        self._load_ratio = 0.0
        self._since_report = 0
        self._report_frames = max(round(sample_rate_hz / REPORTS_PER_S), 1)

    # -- control thread

    @property
    def silent(self) -> bool:
        """Whether nothing is heard."""
        return self.deck.silent

    @property
    def faults(self) -> deque[str]:
        """Faults in words, not yet reported."""
        return self.deck.told

    def play(self) -> None:
        """Start or go on."""
        self.inbox.append(self.deck.start)

    def pause(self) -> None:
        """Fade out and wait."""
        self.inbox.append(self.deck.halt)

    def hold(self) -> None:
        """Wait where it is, as nobody can hear it; ``release`` or ``play`` goes on."""
        self.inbox.append(self.deck.hold)

    def release(self) -> None:
        """End ``hold``: what played goes on."""
        self.inbox.append(self.deck.release)

    def seek(self, frame: int) -> None:
        """Go to a frame."""

        def change() -> None:
            self.deck.head.first_frame = min(max(frame, 0), self.deck.head.reader.frames)

        self.in_silence(change)

    def set_region(self, start: int | None, end: int | None) -> None:
        """Keep to a region, of 10 ms at least; both None for the whole."""
        self.inbox.append(lambda: self.deck.keep_to(start, end))

    def set_at_end(self, at_end: AtEnd) -> None:
        """Loop or stop at the end."""
        self.inbox.append(lambda: self.deck.end_with(at_end))

    def set_bypass(self, on: bool) -> None:
        """Hear the input instead of the stage's output."""
        self.inbox.append(lambda: self.deck.set_bypass(on))

    def set_volume(self, volume_db: float) -> None:
        """Listening volume, at most 0 dB."""
        self.inbox.append(lambda: self.deck.monitor.set_volume(volume_db))

    def mute(self, on: bool, reason: str = "") -> None:
        """Silence the device, or let it be heard again; everything goes on running."""
        deck = self.deck
        self.inbox.append(lambda: deck.monitor.mute(on, reason, at_once=deck.silent))

    def duck(self, gain_db: float) -> None:
        """Be quieter for a moment; 0 dB ends that."""
        self.inbox.append(lambda: self.deck.monitor.duck(gain_db))

    def choose_channels(self, channels: tuple[int, ...]) -> None:
        """Which channels are heard where the device has fewer, in a short silence."""
        there = tuple(channel for channel in channels if 0 <= channel < self.channels)
        self.in_silence(lambda: self.deck.monitor.choose(there))

    def set_full_scale(self, full_scale_v: float) -> None:
        """Change the volts of a sample of 1.0, in a short silence."""
        self.in_silence(lambda: self.deck.set_full_scale(full_scale_v))

    def recover(self) -> None:
        """Take a circuit that has failed up again, from rest."""
        self.in_silence(self.deck.recover)

    def record(self, take: Callable[[Volts], None] | None) -> None:
        """Hand what the stage puts out to this as well; None ends that."""

        def change() -> None:
            self.deck.record = take

        self.inbox.append(change)

    def clear_holds(self) -> None:
        """Clear peak holds, clip counts and dropouts."""

        def clear() -> None:
            self.deck.ears.clear()
            self.deck.monitor.limited_blocks = self.deck.head.late_reads = self.missed_blocks = 0
            if self.deck.circuit is not None:
                self.deck.circuit.clear_readings()

        self.inbox.append(clear)

    def in_silence(self, change: Callable[[], None]) -> None:
        """Post a change that is made after a fade-out; what played goes on after it."""
        self.inbox.append(lambda: self.deck.in_silence(change))

    # -- audio thread

    def take_circuit(self, circuit: LiveCircuit, quality: Quality) -> None:
        """Run this circuit from now on."""
        self.deck.take_circuit(circuit, quality)
        self.missed_blocks = 0

    def fill(self, out: NDArray[np.float32]) -> None:
        """Fill the device's next block, shape (frames, device channels); never raises, never waits."""
        started_s = time.perf_counter()
        frames = len(out)
        deck = self.deck
        if deck.circuit is not None:
            deck.circuit.hurry = int(min(HURRY_LOAD / max(self._load_ratio, 0.01), HURRY_MAX))
        try:
            while self.inbox:
                self.inbox.popleft()()
            for first in range(0, frames, deck.max_frames):
                deck.fill(out[first : first + deck.max_frames])
        except Exception as fault:  # an exception here would end the stream: mute and report instead
            out.fill(0.0)
            deck.give_up(f"the computation failed ({type(fault).__name__}: {fault})")
        if frames:
            share = (time.perf_counter() - started_s) * self.sample_rate_hz / frames
            self._load_ratio += 0.05 * (share - self._load_ratio)
        self._since_report += frames
        if self.snapshot is None and self._since_report >= self._report_frames:
            self._since_report = 0
            self.snapshot = self.report()

    def report(self) -> Snapshot:
        """The state of everything that is heard."""
        return self.deck.report(
            dropouts=self.missed_blocks,
            load_ratio=self._load_ratio,
            latency_s=self.latency_s,
            output_name=self.output_name,
        )
