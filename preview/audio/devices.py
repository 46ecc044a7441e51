"""Sound devices, through PortAudio. The library is loaded on first use, so that a machine without it runs."""

from __future__ import annotations

import contextlib
import threading
from dataclasses import dataclass
from time import monotonic
from typing import Any

import numpy as np
from numpy.typing import NDArray

from preview.audio.output import Fill, Finished, Guard
from preview.errors import DeviceError

__all__ = ["Device", "OutputStream", "find_output", "open_output", "output_devices", "refresh"]

_FIRST_CALLBACK_S = 0.7
_CLOSE_S = 0.5
_ALIVE_S = 0.2
_FALLBACK_NAMES = ("pulse", "pipewire", "default")


@dataclass(frozen=True, slots=True)
class Device:
    """A device that can play. Kept by name and host API, as its number changes when others come and go."""

    name: str
    """Its name."""
    host_api: str
    """The system interface that offers it."""
    max_output_channels: int
    """Most channels it plays."""
    default_sample_rate_hz: float
    """The rate it prefers [Hz]."""
    is_default: bool
    """Whether the system plays through it by default."""


def _library() -> Any:
    """The sounddevice module; raises DeviceError where it or PortAudio is missing."""
    try:
        import sounddevice
    except OSError as error:
        raise DeviceError(
            "the audio library PortAudio is not installed",
            "Debian and Ubuntu: apt install libportaudio2; macOS: brew install portaudio",
        ) from error
    except ImportError as error:
        raise DeviceError(
            "the Python package sounddevice is not installed", "pip install sounddevice"
        ) from error
    return sounddevice


def _table() -> tuple[tuple[int, Device], ...]:
    """Every device that can play, with its present number."""
    sounddevice = _library()
    try:
        apis = sounddevice.query_hostapis()
        try:
            default = sounddevice.query_devices(kind="output")["index"]
        except sounddevice.PortAudioError:  # there is no default
            default = -1
        return tuple(
            (
                row["index"],
                Device(
                    name=row["name"],
                    host_api=apis[row["hostapi"]]["name"],
                    max_output_channels=row["max_output_channels"],
                    default_sample_rate_hz=row["default_samplerate"],
                    is_default=row["index"] == default,
                ),
            )
            for row in sounddevice.query_devices()
            if row["max_output_channels"] > 0
        )
    except sounddevice.PortAudioError as error:
        raise DeviceError(f"the audio devices cannot be listed: {_plain(error)}") from error


def output_devices() -> tuple[Device, ...]:
    """Every device that can play; empty where there is none. DeviceError without the library."""
    return tuple(device for _, device in _table())


def refresh() -> None:
    """Look for devices anew. Every stream must be closed before."""
    sounddevice = _library()
    try:
        # The package has no public way to make PortAudio look again.
        sounddevice._terminate()
        sounddevice._initialize()
    except sounddevice.PortAudioError as error:
        raise DeviceError(f"the audio system does not start: {_plain(error)}") from error


def find_output(text: str) -> Device:
    """The device of that name, or the only one whose ``host API: name`` contains the text in any case."""
    devices = output_devices()
    folded = text.casefold()
    for match in (
        [d for d in devices if d.name == text or f"{d.host_api}: {d.name}" == text],
        [d for d in devices if d.name.casefold() == folded],
        [d for d in devices if folded in f"{d.host_api}: {d.name}".casefold()],
    ):
        if len(match) == 1 or (match and all(d.name == match[0].name for d in match)):
            return match[0]
        if match:
            raise DeviceError(
                f"output device {text}: several fit", "; ".join(f"{d.host_api}: {d.name}" for d in match)
            )
    names = ", ".join(d.name for d in devices) or "none"
    raise DeviceError(f"output device {text}: there is none of that name", f"there is {names}")


def _candidates(wanted: Device | str | None) -> tuple[tuple[int, Device], ...]:
    table = _table()
    if wanted is not None:
        if isinstance(wanted, str):
            wanted = find_output(wanted)
        same = [row for row in table if (row[1].name, row[1].host_api) == (wanted.name, wanted.host_api)]
        if not same:
            raise DeviceError(f"output device {wanted.name}: it is not there any more")
        return (same[0],)
    if not table:
        raise DeviceError("there is no output device", "--silent runs without one")
    first = [row for row in table if row[1].is_default]
    others = [row for name in _FALLBACK_NAMES for row in table if row[1].name == name]
    rest = [] if first or others else list(table)
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
) -> OutputStream:
    """Open a device for playing; nothing is asked for before ``start``.

    Parameters
    ----------
    device : Device, str or None
        None for the system's default, or the next that works.
    latency : float or {"low", "high"}
        Wanted delay [s], or the device's own for interactive or robust use.

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
    ) -> None:
        self._candidates = candidates
        self._rate_hz = sample_rate_hz
        self._channels = channels
        self._block_frames = block_frames
        self._latency = latency
        self._finished = finished
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

    def _open(self, candidate: tuple[int, Device]) -> None:
        index, device = candidate
        sounddevice = _library()
        if self._channels > device.max_output_channels:
            raise DeviceError(
                f"output device {device.name}: it plays {device.max_output_channels} channels, "
                f"not {self._channels}"
            )
        try:
            stream = sounddevice.OutputStream(
                device=index,
                samplerate=self._rate_hz,
                channels=self._channels,
                dtype="float32",
                blocksize=self._block_frames,
                latency=self._latency,
                callback=self._callback,
                finished_callback=self._on_finished,
            )
        except (sounddevice.PortAudioError, ValueError) as error:
            raise DeviceError(
                f"output device {device.name} refuses {self._rate_hz:g} Hz, {self._channels} channels: "
                f"{_plain(error)}",
                f"its own rate is {device.default_sample_rate_hz:g} Hz",
            ) from error
        self._stream = stream
        self.device = device
        self.latency_s = float(stream.latency)

    def _begin(self) -> None:
        sounddevice = _library()
        self._called.clear()
        self._was_called = False
        self.last_callback_s = monotonic()
        try:
            self._stream.start()
        except sounddevice.PortAudioError as error:
            raise DeviceError(f"output device {self.name} does not start: {_plain(error)}") from error
        if not self._called.wait(_FIRST_CALLBACK_S):
            raise DeviceError(f"output device {self.name} stays silent: it never asks for sound")
        self.latency_s = float(self._stream.latency)

    def _drop(self) -> None:
        """Close the stream in a thread of its own: closing a frozen device never returns."""
        stream, self._stream = self._stream, None
        if stream is None:
            return

        def shut() -> None:
            with contextlib.suppress(Exception):  # it is going: whatever it says changes nothing
                stream.close(ignore_errors=True)

        thread = threading.Thread(target=shut, name="closing output", daemon=True)
        thread.start()
        thread.join(_CLOSE_S)

    def _callback(self, out: NDArray[np.float32], frames: int, _times: Any, status: Any) -> None:
        # What was given so far lasts until due_s, at the latest a buffer's length from now. A device starts
        # to play when its buffer is full, so only a block later than due_s by that length is surely too late.
        now_s = monotonic()
        if not self._was_called:
            self._was_called = True
            self._due_s = now_s
            self._called.set()
        elif status.output_underflow or now_s > self._due_s + self.latency_s:
            self.underflows += 1
            self._due_s = now_s
        due_s = max(now_s - self.latency_s, min(self._due_s, now_s + self.latency_s))
        self._due_s = due_s + frames / self._rate_hz
        self.last_callback_s = now_s
        if self._closing:
            out.fill(0.0)
        else:
            self.guard(out)

    def _on_finished(self) -> None:
        if not self._closing and self._stream is not None and self._finished is not None:
            self._finished()


def _plain(error: BaseException) -> str:
    """The library's message without its code."""
    text = str(error.args[0]) if error.args else str(error)
    return text.split(" [PaErrorCode")[0]
