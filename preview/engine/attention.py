"""What the control thread listens to between its other work: the spectrum, and live input that begins to howl."""

from __future__ import annotations

from preview.engine.howl import HowlGuard
from preview.engine.player import Player
from preview.engine.readings import SpectrumReading
from preview.engine.spectrum import Spectrum

__all__ = ["Attention"]

SPECTRUM_TURNS, HOWL_TURNS = 3, 2


class Attention:
    """Listens to one player about 30 times a second.

    Parameters
    ----------
    player : Player
        What plays.
    live : bool
        Whether it is live input.
    """

    def __init__(self, player: Player, *, live: bool) -> None:
        self._player = player
        self._analyser = Spectrum(player.sample_rate_hz)
        self._howl = HowlGuard(player.sample_rate_hz) if live else None
        self._turns = 0
        self._heard_channels: tuple[int, ...] = ()
        self.spectrum: SpectrumReading | None = None
        """Input and output of the last half second."""

    def turn(self) -> list[str]:
        """Listen once; what a person should know, a line each."""
        self._turns += 1
        if self._turns % SPECTRUM_TURNS == 0:
            self.spectrum = self._analyser.read(*self._player.deck.ears.taps)
        return [line for line in (self._howl_round(), self._not_heard()) if line]

    def _howl_round(self) -> str:
        """Mute a howl that grows, unless it is muted already."""
        if self._howl is None or self._turns % HOWL_TURNS:
            return ""
        if not self._howl.hears(self._player.deck.ears.taps[1]) or self._player.deck.monitor.muted:
            return ""
        reason = f"howl-round at {self._howl.frequency_hz:.0f} Hz"
        self._player.mute(True, reason)
        return f"{reason}: muted; lower the volume or move the microphone, then end the mute"

    def _not_heard(self) -> str:
        """Said once for each choice: which channels are heard where the device has fewer than the recording."""
        heard = self._player.deck.monitor.heard_channels
        if not heard or heard == self._heard_channels:
            return ""
        self._heard_channels = heard
        numbers = " and ".join(str(channel + 1) for channel in heard)
        return f"{self._player.channels} channels: {numbers} heard on {self._player.output_name}"
