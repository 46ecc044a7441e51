"""Where the player's blocks go: the sound device, or the silent clock while there is none."""

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
from preview.audio.stream import Inlet, OutputStream, open_output
from preview.engine.player import Player
from preview.errors import DeviceError, PreviewError

__all__ = ["Outlet", "block_frames_for"]

STALL_S = 0.5
RETRY_S, RETRY_LATER_S = 0.4, 1.5
RETRY_OFTEN = 50
FIRST_S = 4.0
ANY_CHANNELS = 32
"""A device that offers so many is a mixer before the real one: it takes what it is given and drops the rest."""
DEVICE_LATENCY_S = 0.08
"""Asked of the device: a value step is heard soon enough, and a busy machine does not break the sound [s]."""
LIVE_LATENCY_S = 0.1
"""Asked of a device that records too: input and output are two buffers to be kept apart [s]."""


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


class _Search:
    """Looks for a device on a thread of its own, again and again: a sound system that hangs holds up nothing else.

    Parameters
    ----------
    open_device : callable
        Opens and starts a device; raises DeviceError.
    lost : Output, optional
        The output to let go of first.
    look_anew : bool
        Whether the library must look for devices anew before the first try.
    """

    def __init__(
        self,
        open_device: Callable[[], tuple[OutputStream, _Feed]],
        *,
        lost: Output | None = None,
        look_anew: bool = False,
    ) -> None:
        self._open_device = open_device
        self._lost = lost
        self._look_anew = look_anew
        self.found: tuple[OutputStream, _Feed] | None = None
        self.trouble: PreviewError | None = None
        self.tried = threading.Event()
        self.ended = threading.Event()
        threading.Thread(target=self._run, name="device search", daemon=True).start()

    def _run(self) -> None:
        if self._lost is not None:
            self._lost.close()
            if isinstance(self._lost, OutputStream):
                self._lost.wait_closed()
        turn = 0
        while not self.ended.is_set():
            try:
                if self._look_anew or turn:
                    devices.refresh()
                found = self._open_device()
            except PreviewError as error:
                self.trouble = error
                self.tried.set()
                turn += 1
                self.ended.wait(RETRY_S if self._lost is not None and turn < RETRY_OFTEN else RETRY_LATER_S)
                continue
            if self.ended.is_set():
                found[0].close()
            self.found = found
            self.tried.set()
            return


class Outlet:
    """Plays a player's blocks; where the device is lost the player waits until one is there again.

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
        self.device = device
        """The device wanted, by name; None for the default."""
        self._silent = silent
        self._block_frames = block_frames
        self._tell = tell
        self._feed = _Feed()
        self._output: Output | None = None
        self._player: Player | None = None
        self._shape: tuple[object, ...] | None = None
        self._inlet: Inlet | None = None
        self._search: _Search | None = None
        self._seen_underflows = 0
        self._was_heard = False
        self._opened: str | None = None
        """The name by which the last device was opened."""

    @property
    def stood_in_for(self) -> str | None:
        """The device that is wanted, where another one plays in its place."""
        playing = isinstance(self._output, OutputStream) and self._search is None
        return self.device if playing and self._opened != self.device else None

    @property
    def live_latency_s(self) -> float:
        """From the input to its block; 0 without live input [s]."""
        return self._output.input_latency_s if isinstance(self._output, OutputStream) else 0.0

    @property
    def input_name(self) -> str:
        """Input device in use; empty without live input."""
        return self._output.input_name if isinstance(self._output, OutputStream) else ""

    def play(self, player: Player | None, inlet: Inlet | None = None) -> None:
        """Ask this player for the blocks from now on; opens an output where its rate, channels or input need one."""
        self._player = player
        if player is None:
            self._feed.player = None
            return
        shape = (player.sample_rate_hz, player.channels, inlet)
        if self._output is None or self._shape != shape:
            self._shape, self._inlet = shape, inlet
            self._open_first(player)
        self._put_on(player)

    def change_device(self, name: str | None) -> None:
        """Play through another device; the player waits meanwhile."""
        self.device = name
        self._silent = False
        self.open_anew()

    def open_anew(self) -> None:
        """Look for the device that is wanted; the player waits meanwhile."""
        if self._player is not None and self._search is None:
            self._let_go(self._player)

    def watch(self) -> None:
        """Look after the output: count missed blocks, notice a lost device, take up one that is there."""
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
        if self._search is not None:
            if self._search.found is not None:
                self._take(player, *self._search.found)
        elif isinstance(output, OutputStream) and self._has_stopped(output):
            self._tell(
                f"{output.name} has stopped; waiting here until a device is back (play goes on without sound)",
                "warning",
            )
            self._let_go(player)

    def close(self) -> None:
        """End the output."""
        self._feed.player = None
        if self._search is not None:
            self._search.ended.set()
            self._search = None
        if self._output is not None:
            self._output.close()
            self._output = None

    def _has_stopped(self, output: OutputStream) -> bool:
        return self._feed.ended or time.monotonic() - output.last_callback_s > STALL_S

    def _put_on(self, player: Player) -> None:
        assert self._output is not None
        player.output_name = self._output.name
        player.latency_s = self._output.latency_s
        self._seen_underflows = self._output.underflows
        self._feed.player = player

    def _open_first(self, player: Player) -> None:
        """A device for this player, or the silent clock while one is looked for."""
        self.close()
        if not self._silent:
            self._search = search = _Search(lambda: self._open_device(player))
            search.tried.wait(FIRST_S)
            if search.found is not None:
                self._output, self._feed = search.found
                self._search = None
                return
            trouble = search.trouble or "the sound system does not answer"
            self._tell(f"no sound: {trouble}; running on the silent clock", "warning")
            if not devices.installed():
                search.ended.set()
                self._search = None
        self._use_clock(player)

    def _use_clock(self, player: Player) -> None:
        self._feed = _Feed()
        rate = player.sample_rate_hz
        frames = self._block_frames or block_frames_for(rate)
        self._output = SilentClock(rate, 2, frames, self._feed)
        self._output.start()

    def _let_go(self, player: Player) -> None:
        """Leave the device: wait silently, look for one on a thread of its own."""
        player.hold()
        lost, self._feed.player = self._output, None
        self._use_clock(player)
        self._put_on(player)
        self._search = _Search(lambda: self._open_device(player, any_device=True), lost=lost, look_anew=True)

    def _take(self, player: Player, output: OutputStream, feed: _Feed) -> None:
        """Change from the silent clock to the device that is there now."""
        self._search = None
        self._feed.player = None
        if self._output is not None:
            self._output.close()
        self._output, self._feed = output, feed
        self._put_on(player)
        player.release()
        self._tell(f"sound is back on {output.name}", "information")

    # -- on the search's thread

    def _open_device(self, player: Player, *, any_device: bool = False) -> tuple[OutputStream, _Feed]:
        """A started device with a feed that is still silent; the file's rate and channels come first."""
        trouble: DeviceError | None = None
        names = [self.device, None] if any_device and self.device is not None else [self.device]
        rate = player.sample_rate_hz
        for name in names:
            try:
                own_rate, most = self._own(name)
            except DeviceError as error:
                trouble = trouble or error
                continue
            several = player.channels if 2 < player.channels <= most < ANY_CHANNELS else 2
            for channels in dict.fromkeys((several, 2, 1)):
                for device_rate in dict.fromkeys((rate, own_rate or rate)):
                    try:
                        opened = self._start_device(name, rate, device_rate, channels)
                    except DeviceError as error:
                        trouble = trouble or error
                        continue
                    self._opened = name
                    if name != self.device:
                        self._tell(f"{trouble}; using {opened[0].name}", "warning")
                    return opened
        assert trouble is not None
        raise trouble

    def _start_device(
        self, name: str | None, rate: float, device_rate: float, channels: int
    ) -> tuple[OutputStream, _Feed]:
        feed = _Feed()
        frames = self._block_frames or block_frames_for(device_rate)
        if device_rate == rate:
            fill: Callable[[NDArray[np.float32]], None] = feed
        elif self._inlet is None:
            fill = ResampledFill(feed, rate, device_rate, channels)
        else:
            raise DeviceError(f"live input at {rate:g} Hz: the device runs at {device_rate:g} Hz")
        stream = open_output(
            name,
            sample_rate_hz=device_rate,
            channels=channels,
            block_frames=frames,
            fill=fill,
            finished=feed.finished,
            latency=DEVICE_LATENCY_S if self._inlet is None else LIVE_LATENCY_S,
            inlet=self._inlet,
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
    def _own(name: str | None) -> tuple[float | None, int]:
        """The device's preferred rate [Hz], None where there is no device, and the channels it has."""
        if name is not None:
            device: devices.Device | None = devices.find_output(name)
        else:
            device = next((one for one in devices.output_devices() if one.is_default), None)
        return (
            (device.default_sample_rate_hz, device.max_output_channels) if device is not None else (None, 2)
        )
