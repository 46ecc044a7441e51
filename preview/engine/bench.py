"""Where circuits are built for one player, on the preparer's thread, and handed to its audio thread."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING

from preview.circuit.netlist import Netlist
from preview.engine.player import Player
from preview.values.noise import NoiseSetting
from preview.values.quality import Quality

if TYPE_CHECKING:
    from preview.dsp.stage import StageProcessor
    from preview.engine.rack import Rack

__all__ = ["Bench"]


class Bench:
    """Builds the stages of a rack and plans their glides.

    Parameters
    ----------
    player : Player
        Who runs the rack.
    ready : callable
        Called when the first stage is built and everything is loaded.
    noise : NoiseSetting, optional
        The noise of the parts is heard too.
    power_on : bool
        The first stage begins by being switched on.
    """

    def __init__(
        self,
        player: Player,
        ready: Callable[[], None],
        *,
        noise: NoiseSetting | None = None,
        power_on: bool = False,
    ) -> None:
        self._player = player
        self._noise, self._power_on = noise, power_on
        self._ready = ready
        self._rack: Rack | None = None
        self._stages: dict[str, StageProcessor] = {}
        self._guard = threading.Lock()  # between those who hand over; the audio thread never takes it
        self._handed_over = 0
        self._taken = 0

    def build(self, letter: str, netlist: Netlist, quality: Quality) -> Callable[[], None]:
        """Compute and warm a stage."""
        from preview.dsp.oversample import design, factor_for
        from preview.dsp.stage import StageProcessor, load_kernels
        from preview.engine.rack import Rack

        player = self._player
        stage = StageProcessor(
            netlist,
            sample_rate_hz=player.sample_rate_hz,
            channels=player.channels,
            quality=quality,
            noise=self._noise,
        )
        if self._power_on and self._rack is None:
            stage.power_on()
        self._stages[letter] = stage
        rack = self._rack
        if rack is not None:

            def put() -> None:
                rack.put(letter, stage)
                if letter == rack.letter:
                    player.deck.circuit_changed(quality)

            return put
        first = self._rack = Rack(
            letter, stage, sample_rate_hz=player.sample_rate_hz, channels=player.channels
        )
        for each in Quality:  # designed now and kept: while it plays, that would take the device's blocks
            design(factor_for(each, player.sample_rate_hz))
        load_kernels()  # likewise
        self._ready()
        return lambda: player.take_circuit(first, quality)

    def plan(self, letter: str, values: Mapping[str, float]) -> Callable[[], None]:
        """Plan a glide of a stage."""
        stage = self._stages[letter]
        glide = stage.plan(values)
        return lambda: stage.glide(glide)

    def select(self, letter: str) -> Callable[[], None]:
        """Hear a candidate."""
        return self._change(lambda rack: rack.select(letter))

    def listen_null(self, first: str, second: str) -> Callable[[], None]:
        """Hear the first candidate minus the second."""
        return self._change(lambda rack: rack.listen_null(first, second))

    def drop(self, letter: str) -> Callable[[], None]:
        """Forget a candidate that is not heard."""
        self._stages.pop(letter, None)
        return self._on_rack(lambda rack: rack.drop(letter))

    def set_gains(self, gains: Mapping[str, float]) -> Callable[[], None]:
        """The gain at which each candidate is heard."""
        return self._on_rack(lambda rack: rack.set_gains(gains))

    def settled(self, letter: str) -> bool:
        """Whether the stage of that letter can take another glide or give way to another."""
        if self._taken != self._handed_over:
            return False
        if self._rack is None or letter not in self._stages:
            return True
        return self._stages[letter].ready and not self._rack.swapping

    def hand_over(self, start: Callable[[], None]) -> None:
        """Have a call made on the audio thread."""

        def take() -> None:
            self._taken += 1
            start()

        with self._guard:
            self._handed_over += 1
        self._player.inbox.append(take)

    def _change(self, order: Callable[[Rack], None]) -> Callable[[], None]:
        """An order after which something else is heard."""

        def change(rack: Rack) -> None:
            order(rack)
            self._player.deck.circuit_changed(self._player.deck.quality)

        return self._on_rack(change)

    def _on_rack(self, order: Callable[[Rack], None]) -> Callable[[], None]:
        def take() -> None:
            if self._rack is not None:
                order(self._rack)

        return take
