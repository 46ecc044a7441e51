"""What the control thread listens to between its other work: the spectrum, and live input that begins to howl."""

from __future__ import annotations

from preview.engine.howl import HowlGuard
from preview.engine.player import Player
from preview.engine.readings import SpectrumReading
from preview.engine.spectrum import Spectrum
from preview.engine.standing import DUCK_DB, StandingGuard

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
        self._standing = StandingGuard(player.sample_rate_hz)
        self._limited_blocks = 0
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
        """Mute a howl that grows, or that stands at a limit, unless it is muted already."""
        if self._howl is None or self._turns % HOWL_TURNS:
            return ""
        grows = self._howl.hears(self._player.deck.ears.taps[1])
        stands = self._stands()
        if not (grows or stands) or self._player.deck.monitor.muted:
            return ""
        frequency_hz = self._howl.frequency_hz if grows else self._standing.frequency_hz
        reason = f"howl-round at {frequency_hz:.0f} Hz"
        self._player.mute(True, reason)
        return f"{reason}: muted; lower the volume or move the microphone, then end the mute"

    def _stands(self) -> bool:
        """Whether a howl stands at a limit; to find out the output is made quieter for a moment."""
        guard, deck = self._standing, self._player.deck
        limited = deck.monitor.limited_blocks != self._limited_blocks
        self._limited_blocks = deck.monitor.limited_blocks
        was_ducked = guard.ducked
        if deck.monitor.muted or deck.silent:
            guard.forget()
            stands = False
        else:
            stands = guard.hears(*deck.ears.taps, limited=limited)
        if guard.ducked != was_ducked:
            self._player.duck(DUCK_DB if guard.ducked else 0.0)
        return stands

    def _not_heard(self) -> str:
        """Said once for each choice: which channels are heard where the device has fewer than the recording."""
        heard = self._player.deck.monitor.heard_channels
        if not heard or heard == self._heard_channels:
            return ""
        self._heard_channels = heard
        numbers = " and ".join(str(channel + 1) for channel in heard)
        return f"{self._player.channels} channels: {numbers} heard on {self._player.output_name}"
