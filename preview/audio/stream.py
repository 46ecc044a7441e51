"""Streams to a sound device, and for live input from one too, through PortAudio."""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable
from dataclasses import dataclass
from time import monotonic
from typing import Any

import numpy as np
from numpy.typing import NDArray

from preview.audio.devices import Device, find_input, find_output, library, plain, table
from preview.audio.output import Fill, Finished, Guard
from preview.errors import DeviceError

__all__ = ["Capture", "Inlet", "OutputStream", "open_output"]

_FIRST_CALLBACK_S = 0.7
_CLOSE_S = 0.5
_ALIVE_S = 0.2
_FALLBACK_NAMES = ("pulse", "pipewire", "default")

Capture = Callable[[NDArray[np.float32]], None]
"""Given what was recorded, shape (frames, channels), just before the block of the same length is asked for."""


@dataclass(frozen=True, slots=True)
class Inlet:
    """Live input that comes with an output, on one clock."""

    device: str | None
    """Input device by name; None for the default."""
    channels: int
    """Channels to record."""
    take: Capture
    """Given each recorded block."""


def _candidates(wanted: Device | str | None) -> tuple[tuple[int, Device], ...]:
    rows = tuple(row for row in table() if row[1].max_output_channels > 0)
    if wanted is not None:
        if isinstance(wanted, str):
            wanted = find_output(wanted)
        same = [row for row in rows if (row[1].name, row[1].host_api) == (wanted.name, wanted.host_api)]
        if not same:
            raise DeviceError(f"output device {wanted.name}: it is not there any more")
        return (same[0],)
    if not rows:
        raise DeviceError("there is no output device", "--silent runs without one")
    first = [row for row in rows if row[1].is_default]
    others = [row for name in _FALLBACK_NAMES for row in rows if row[1].name == name]
    rest = [] if first or others else list(rows)
    return tuple(dict.fromkeys(first + others + rest))


def open_output(
    device: Device | str | None,
    *,
    sample_rate_hz: float,
    channels: int,
    block_frames: int,
    fill: Fill,
    finished: Finished | None = None,
    latency: float | str = "high",
    inlet: Inlet | None = None,
) -> OutputStream:
    """Open a device for playing; nothing is asked for before ``start``.

    Parameters
    ----------
    device : Device, str or None
        None for the system's default, or the next that works.
    latency : float or {"low", "high"}
        Wanted delay [s], or the device's own for interactive or robust use.
    inlet : Inlet, optional
        Live input on the same clock.

    Raises
    ------
    DeviceError
        No library, no device, or the device refuses.
    """
    trouble: DeviceError | None = None
    candidates = _candidates(device)
    for at, candidate in enumerate(candidates):
        stream = OutputStream(
            candidates[at:],
            sample_rate_hz=sample_rate_hz,
            channels=channels,
            block_frames=block_frames,
            fill=fill,
            finished=finished,
            latency=latency,
            inlet=inlet,
        )
        try:
            stream._open(candidate)
        except DeviceError as error:
            trouble = trouble or error
            continue
        return stream
    raise trouble or DeviceError("there is no output device", "--silent runs without one")


class OutputStream:
    """A playing device. Made by ``open_output``; ``start`` steps to the next candidate if one stays dead."""

    def __init__(
        self,
        candidates: tuple[tuple[int, Device], ...],
        *,
        sample_rate_hz: float,
        channels: int,
        block_frames: int,
        fill: Fill,
        finished: Finished | None,
        latency: float | str,
        inlet: Inlet | None,
    ) -> None:
        self._candidates = candidates
        self._rate_hz = sample_rate_hz
        self._channels = channels
        self._block_frames = block_frames
        self._latency = latency
        self._finished = finished
        self._inlet = inlet
        self._closer: threading.Thread | None = None
        self._stream: Any = None
        self._closing = False
        self._called = threading.Event()
        self._was_called = False
        self._due_s = 0.0
        self.guard = Guard(fill, block_frames, channels)
        """Counts of what had to be held back."""
        self.device = candidates[0][1]
        """The device in use."""
        self.latency_s = 0.0
        """From a block's computation to its sound, as the system reports it [s]."""
        self.input_latency_s = 0.0
        """From a sound at the input to its block, as the system reports it; 0 without input [s]."""
        self.input_name = ""
        """Input device in use."""
        self.underflows = 0
        """Blocks that came too late, by the system's flag or by the clock."""
        self.last_callback_s = monotonic()
        """``time.monotonic()`` of the last block asked for; of the start before the first [s]."""

    @property
    def name(self) -> str:
        """The device's name."""
        return self.device.name

    def start(self) -> None:
        """Begin to play; returns when the device has asked for its first block.

        Raises
        ------
        DeviceError
            No candidate asked for a block in time.
        """
        trouble: DeviceError | None = None
        for at, candidate in enumerate(self._candidates):
            try:
                if at or self._stream is None:
                    self._open(candidate)
                self._begin()
            except DeviceError as error:
                trouble = trouble or error
                self._drop()
                continue
            return
        raise trouble or DeviceError("the output is closed")

    def close(self) -> None:
        """End it when what was computed has been heard; may be called twice, but not from ``finished``.

        A frozen device is given up at once and cannot hang the caller.
        """
        self._closing = True
        if self._stream is not None and monotonic() - self.last_callback_s < _ALIVE_S:
            drain_s = self.latency_s + 2 * self._block_frames / self._rate_hz
            threading.Event().wait(min(drain_s, _CLOSE_S))
        self._candidates = ()
        self._drop()

    def wait_closed(self) -> None:
        """Wait until the library has let go of the device, which a frozen one prevents; then others can be opened."""
        if self._closer is not None:
            self._closer.join()

    def _open(self, candidate: tuple[int, Device]) -> None:
        index, device = candidate
        sounddevice = library()
        if self._channels > device.max_output_channels:
            raise DeviceError(
                f"output device {device.name}: it plays {device.max_output_channels} channels, "
                f"not {self._channels}"
            )
        common = {
            "samplerate": self._rate_hz,
            "dtype": "float32",
            "blocksize": self._block_frames,
            "latency": self._latency,
            "finished_callback": self._on_finished,
        }
        try:
            if self._inlet is None:
                stream = sounddevice.OutputStream(
                    device=index, channels=self._channels, callback=self._callback, **common
                )
            else:
                source, self.input_name = _input_for(self._inlet, device)
                stream = sounddevice.Stream(
                    device=(source, index),
                    channels=(self._inlet.channels, self._channels),
                    callback=self._duplex,
                    **common,
                )
        except (sounddevice.PortAudioError, ValueError) as error:
            raise DeviceError(
                f"output device {device.name} refuses {self._rate_hz:g} Hz, {self._channels} channels: "
                f"{plain(error)}",
                f"its own rate is {device.default_sample_rate_hz:g} Hz",
            ) from error
        self._stream = stream
        self.device = device
        self._ask_latency()

    def _ask_latency(self) -> None:
        told = self._stream.latency
        if self._inlet is None:
            self.latency_s = float(told)
        else:
            self.input_latency_s, self.latency_s = (float(one) for one in told)

    def _begin(self) -> None:
        sounddevice = library()
        self._called.clear()
        self._was_called = False
        self.last_callback_s = monotonic()
        try:
            self._stream.start()
        except sounddevice.PortAudioError as error:
            raise DeviceError(f"output device {self.name} does not start: {plain(error)}") from error
        if not self._called.wait(_FIRST_CALLBACK_S):
            raise DeviceError(f"output device {self.name} stays silent: it never asks for sound")
        self._ask_latency()

    def _drop(self) -> None:
        """Close the stream in a thread of its own: closing a frozen device never returns."""
        stream, self._stream = self._stream, None
        if stream is None:
            return

        def shut() -> None:
            with contextlib.suppress(Exception):  # it is going: whatever it says changes nothing
                stream.close(ignore_errors=True)

        self._closer = threading.Thread(target=shut, name="closing output", daemon=True)
        self._closer.start()
        self._closer.join(_CLOSE_S)

    def _callback(self, out: NDArray[np.float32], frames: int, _times: Any, status: Any) -> None:
        # What was given so far lasts until due_s, at the latest a buffer's length from now. A device starts
        # to play when its buffer is full, so only a block later than due_s by that length is surely too late.
        now_s = monotonic()
        if not self._was_called:
            self._was_called = True
            self._due_s = now_s
            self._called.set()
        elif status.output_underflow or status.input_overflow or now_s > self._due_s + self.latency_s:
            self.underflows += 1
            self._due_s = now_s
        due_s = max(now_s - self.latency_s, min(self._due_s, now_s + self.latency_s))
        self._due_s = due_s + frames / self._rate_hz
        self.last_callback_s = now_s
        if self._closing:
            out.fill(0.0)
        else:
            self.guard(out)

    def _duplex(
        self, recorded: NDArray[np.float32], out: NDArray[np.float32], frames: int, times: Any, status: Any
    ) -> None:
        assert self._inlet is not None
        if not self._closing:
            self._inlet.take(recorded)
        self._callback(out, frames, times, status)

    def _on_finished(self) -> None:
        if not self._closing and self._stream is not None and self._finished is not None:
            self._finished()


def _input_for(inlet: Inlet, output: Device) -> tuple[int, str]:
    """Number and name of the input device; it must be offered by the same system interface as the output."""
    rows = [row for row in table() if row[1].max_input_channels > 0 and row[1].host_api == output.host_api]
    if inlet.device is not None:
        wanted = find_input(inlet.device)
        rows = [row for row in rows if row[1].name == wanted.name]
        if not rows:
            raise DeviceError(
                f"input device {wanted.name} belongs to {wanted.host_api}, output device {output.name} to "
                f"{output.host_api}",
                "choose both from one system interface",
            )
    rows.sort(key=lambda row: not row[1].is_default_input)
    for number, device in rows[:1]:
        if device.max_input_channels < inlet.channels:
            raise DeviceError(
                f"input device {device.name}: it records {device.max_input_channels} channels, "
                f"not {inlet.channels}"
            )
        return number, device.name
    raise DeviceError("there is no input device", "name a recording or a test signal instead")
