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
        self.spectrum: SpectrumReading | None = None
        """Input and output of the last half second."""

    def turn(self) -> str:
        """Listen once; what was muted and why, empty for nothing."""
        self._turns += 1
        before, after = self._player.deck.ears.taps
        if self._turns % SPECTRUM_TURNS == 0:
            self.spectrum = self._analyser.read(before, after)
        if self._howl is None or self._turns % HOWL_TURNS or not self._howl.hears(after):
            return ""
        if self._player.deck.monitor.muted:
            return ""
        reason = f"howl-round at {self._howl.frequency_hz:.0f} Hz"
        self._player.mute(True, reason)
        return f"{reason}: muted; lower the volume or move the microphone, then end the mute"
