"""What is heard of a live input, written to a file while it is heard."""

from __future__ import annotations

import threading

import numpy as np
from numpy.typing import NDArray

from preview.audio.sink import FileSink
from preview.dsp.block import Volts
from preview.engine.commands import Export
from preview.engine.loop import peak
from preview.engine.readings import ExportState
from preview.engine.render import output_comment, output_scale_v
from preview.errors import PreviewError
from preview.values.levels import format_volts

__all__ = ["Recorder"]

MOST_S = 1800.0
"""A recording that nobody ends is ended after so long [s]."""
ROOM_S = 8.0
"""A disk that is busy for longer loses frames [s]."""
TURN_S = 0.1
TOLD_EVERY = 5


class Recorder:
    """Takes the output of the stage on the audio thread, and writes it to a file on a thread of its own.

    Parameters
    ----------
    order : Export
        The file, its depth, and the session that is heard.
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels of the input.
    most_s : float
        Longest recording [s].

    Raises
    ------
    UsageError, OutputFileError
        Such a file cannot be written.
    """

    def __init__(
        self, order: Export, *, sample_rate_hz: float, channels: int, most_s: float = MOST_S
    ) -> None:
        self._out = order.out
        self._rate_hz = sample_rate_hz
        self._most_frames = round(most_s * sample_rate_hz)
        self._scale_v = output_scale_v(order.session.netlist(), order.session, order.depth)
        self._ring = np.zeros((round(ROOM_S * sample_rate_hz), channels))
        self._taken = self._written = self._lost = 0
        self._peak_v = 0.0
        self._end = threading.Event()
        self._last: ExportState | None = None
        self._sink = FileSink(
            order.out,
            sample_rate_hz=sample_rate_hz,
            channels=channels,
            depth=order.depth,
            comment=output_comment(order.session, self._scale_v),
        )
        self._thread = threading.Thread(target=self._write, name="recorder", daemon=True)
        self._thread.start()

    def take(self, volts: Volts) -> None:
        """Take the next frames; for the audio thread. What there is no room for is lost, and counted."""
        frames, size = len(volts), len(self._ring)
        if self._end.is_set():
            return
        if self.waiting_frames + frames > size:
            self._lost += frames
            return
        at = self._taken % size
        first = min(frames, size - at)
        self._ring[at : at + first] = volts[:first]
        self._ring[: frames - first] = volts[first:]
        self._taken += frames

    def state(self) -> ExportState | None:
        """How far it is, where there is something new to tell."""
        told, self._last = self._last, None
        return told

    def end(self) -> None:
        """End it; the file is in its place soon after, and ``state`` says so."""
        self._end.set()

    def close(self) -> None:
        """End it and wait until the file is in its place."""
        self.end()
        self.join()

    def join(self) -> None:
        """Wait until it has ended."""
        self._thread.join()

    @property
    def waiting_frames(self) -> int:
        """Frames taken and not yet written."""
        return self._taken - self._written

    def _write(self) -> None:
        """Until the end: what was taken, a tenth of a second at a time."""
        try:
            with self._sink:
                turn, over = 0, False
                while not over:
                    over = self._end.wait(TURN_S) or self._written >= self._most_frames
                    self._write_what_is_there()
                    turn += 1
                    if turn % TOLD_EVERY == 0:
                        self._last = ExportState(
                            str(self._out),
                            self._written,
                            0,
                            "running",
                            hidden=self._sink.hidden,
                            readable=self._sink.bring_up(),
                        )
                self._end.set()
        except PreviewError as error:
            self._last = ExportState(str(self._out), 0, 0, "failed", str(error))
        except Exception as error:  # the sound goes on; what failed is said
            self._last = ExportState(str(self._out), 0, 0, "failed", f"{type(error).__name__}: {error}")
        else:
            self._last = ExportState(str(self._out), self._written, self._written, "done", self._summary())

    def _write_what_is_there(self) -> None:
        size = len(self._ring)
        last = min(self._taken, self._most_frames)
        while self._written < last:
            at = self._written % size
            piece: NDArray[np.float64] = self._ring[at : at + min(last - self._written, size - at)]
            self._peak_v = max(self._peak_v, peak(piece))
            self._sink.write(piece / self._scale_v)
            self._written += len(piece)

    def _summary(self) -> str:
        seconds = self._written / self._rate_hz
        said = f"{self._out.name}: {seconds:.2f} s recorded, peak {format_volts(self._peak_v)}"
        if self._written >= self._most_frames:
            said += f", the most of one recording ({self._most_frames / self._rate_hz / 60.0:g} min)"
        if self._sink.over_count:
            said += f", {self._sink.over_count} samples at full scale"
        if self._lost:
            said += f", {self._lost / self._rate_hz:.2f} s lost as the disk was busy"
        return said
