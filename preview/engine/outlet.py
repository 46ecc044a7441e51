"""Where the player's blocks go: the sound device, or the silent clock where there is none."""

from __future__ import annotations

import math
import threading
import time
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from preview.audio import devices
from preview.audio.clock import SilentClock
from preview.audio.output import Output
from preview.audio.resample import ResampledFill
from preview.engine.player import Player
from preview.errors import DeviceError, PreviewError

__all__ = ["Outlet", "block_frames_for"]

STALL_S = 0.5
RETRY_S = 2.0
DEVICE_LATENCY_S = 0.08
"""Asked of the device: a value step is heard soon enough, and a busy machine does not break the sound [s]."""


def block_frames_for(sample_rate_hz: float) -> int:
    """Frames of a block of about 10 ms, a power of two: 512 at 48 kHz."""
    return 1 << max(round(math.log2(sample_rate_hz * 0.0107)), 6)


class _Feed:
    """What an output calls for each block; without a player it is silence."""

    def __init__(self) -> None:
        self.player: Player | None = None
        self.ended = False

    def __call__(self, out: NDArray[np.float32]) -> None:
        player = self.player
        if player is None:
            out.fill(0.0)
        else:
            player.fill(out)

    def finished(self) -> None:
        """The output has ended by itself."""
        self.ended = True


class Outlet:
    """Plays a player's blocks, and goes on silently when the device is lost until one is there again.

    Parameters
    ----------
    device : str, optional
        Name of the device; None for the default.
    silent : bool
        Use no device.
    block_frames : int, optional
        Frames a block; None for about 10 ms.
    tell : callable
        Told a line and its severity.
    """

    def __init__(
        self,
        *,
        device: str | None,
        silent: bool,
        block_frames: int | None,
        tell: Callable[[str, str], None],
    ) -> None:
        self._device = device
        self._silent = silent
        self._block_frames = block_frames
        self._tell = tell
        self._feed = _Feed()
        self._output: Output | None = None
        self._player: Player | None = None
        self._shape: tuple[float, int] | None = None
        self._seen_underflows = 0
        self._was_heard = False
        self._closed = threading.Event()
        self._recovery: threading.Thread | None = None
        self._found: tuple[Output, _Feed] | None = None

    def play(self, player: Player | None) -> None:
        """Ask this player for the blocks from now on; opens an output where its rate or channels need one."""
        self._player = player
        if player is None:
            self._feed.player = None
            return
        shape = (player.sample_rate_hz, player.channels)
        if self._output is None or self._shape != shape:
            if self._output is not None:
                self._feed.player = None
                self._output.close()
            self._shape = shape
            self._open_first(player)
        self._put_on(player)

    def watch(self) -> None:
        """Look after the output: count missed blocks, notice a lost device, take up one that is back."""
        output, player = self._output, self._player
        if output is None or player is None:
            return
        missed = output.underflows - self._seen_underflows
        if missed > 0:
            self._seen_underflows += missed
            if self._was_heard and not player.silent:
                player.missed_blocks += missed
        self._was_heard = not player.silent
        player.latency_s = output.latency_s
        found, self._found = self._found, None
        if found is not None:
            self._take(player, *found)
        elif isinstance(output, devices.OutputStream):
            stalled = time.monotonic() - output.last_callback_s > STALL_S
            if stalled or self._feed.ended:
                self._lose(player, output)

    def close(self) -> None:
        """End the output."""
        self._closed.set()
        self._feed.player = None
        if self._output is not None:
            self._output.close()
            self._output = None

    def _put_on(self, player: Player) -> None:
        assert self._output is not None
        player.output_name = self._output.name
        player.latency_s = self._output.latency_s
        self._seen_underflows = self._output.underflows
        self._feed.player = player

    def _open_first(self, player: Player) -> None:
        if not self._silent:
            try:
                self._output, self._feed = self._open_device(player)
                return
            except DeviceError as error:
                self._tell(f"no sound: {error}; running on the silent clock", "warning")
        self._use_clock(player)

    def _use_clock(self, player: Player) -> None:
        self._feed = _Feed()
        rate = player.sample_rate_hz
        frames = self._block_frames or block_frames_for(rate)
        self._output = SilentClock(rate, 2, frames, self._feed)
        self._output.start()

    def _open_device(self, player: Player, *, any_device: bool = False) -> tuple[Output, _Feed]:
        """A started device with a feed that is still silent; the file's rate and channels come first."""
        trouble: DeviceError | None = None
        names = [self._device, None] if any_device and self._device is not None else [self._device]
        rate = player.sample_rate_hz
        for name in names:
            for channels in dict.fromkeys((max(player.channels, 2), 2, 1)):
                for device_rate in dict.fromkeys((rate, self._own_rate(name) or rate)):
                    try:
                        return self._start_device(name, rate, device_rate, channels)
                    except DeviceError as error:
                        trouble = trouble or error
        assert trouble is not None
        raise trouble

    def _start_device(
        self, name: str | None, rate: float, device_rate: float, channels: int
    ) -> tuple[Output, _Feed]:
        feed = _Feed()
        frames = self._block_frames or block_frames_for(device_rate)
        fill = feed if device_rate == rate else ResampledFill(feed, rate, device_rate, channels)
        stream = devices.open_output(
            name,
            sample_rate_hz=device_rate,
            channels=channels,
            block_frames=frames,
            fill=fill,
            finished=feed.finished,
            latency=DEVICE_LATENCY_S,
        )
        try:
            stream.start()
        except DeviceError:
            stream.close()
            raise
        if device_rate != rate:
            self._tell(
                f"{stream.name} plays at {device_rate:g} Hz; the signal is converted to it", "information"
            )
        return stream, feed

    @staticmethod
    def _own_rate(name: str | None) -> float | None:
        """The device's preferred rate [Hz], None where there is no device."""
        if name is not None:
            return devices.find_output(name).default_sample_rate_hz
        found = devices.output_devices()
        return next((d.default_sample_rate_hz for d in found if d.is_default), None)

    def _lose(self, player: Player, output: Output) -> None:
        """The device is gone: go on silently at once, look for it on a thread of its own."""
        self._feed.player = None
        self._tell(f"{output.name} has stopped; going on without sound until a device is back", "warning")
        self._use_clock(player)
        self._put_on(player)
        self._recovery = threading.Thread(
            target=self._recover, args=(player, output), name="recovery", daemon=True
        )
        self._recovery.start()

    def _recover(self, player: Player, lost: Output) -> None:
        """Close the lost device (which may take for ever), then try to open one again and again."""
        lost.close()
        while not self._closed.is_set():
            try:
                devices.refresh()
                found = self._open_device(player, any_device=True)
            except PreviewError:
                self._closed.wait(RETRY_S)
                continue
            self._found = found
            return

    def _take(self, player: Player, output: Output, feed: _Feed) -> None:
        """Change from the silent clock to the device that is back."""
        if self._shape != (player.sample_rate_hz, player.channels) or self._closed.is_set():
            output.close()
            return
        self._feed.player = None
        if self._output is not None:
            self._output.close()
        self._output, self._feed = output, feed
        self._put_on(player)
        self._tell(f"sound is back on {output.name}", "information")
