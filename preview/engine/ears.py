"""What is read off the signal while it plays: levels, the spectrum's taps, what the op-amps did."""

from __future__ import annotations

from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.engine.loop import LiveCircuit, Meter, joined_readings
from preview.engine.spectrum import Tap
from preview.meters.reading import LevelReading

__all__ = ["Ears"]

HANDOVER_S = 0.030


class Ears:
    """Meters at the stage's input and output; for the audio thread but for ``levels``.

    Parameters
    ----------
    meters : tuple of Meter
        At the stage's input and at its output.
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels of the signal.
    """

    def __init__(self, meters: tuple[Meter, Meter], *, sample_rate_hz: float, channels: int) -> None:
        self.input_meter, self.output_meter = meters
        self.taps = Tap(sample_rate_hz, channels), Tap(sample_rate_hz, channels)
        """The last moments of input and output."""
        self._handover_frames = round(HANDOVER_S * sample_rate_hz)
        self._unheld_frames = 0
        self._earlier: tuple[OpAmpReading, ...] = ()
        self.opamp_peaks_v: tuple[float, ...] = ()
        """Largest output voltage of each op-amp between the last two readings [V]."""

    def feed(self, volts_in: Volts, volts_out: Volts, *, swapping: bool) -> None:
        """Take the next frames; while one signal fades into another nothing is held."""
        self.input_meter.feed(volts_in)
        self.output_meter.feed(volts_out)
        self.taps[0].write(volts_in)
        self.taps[1].write(volts_out)
        if self._unheld_frames > 0:
            self.output_meter.clear_hold()
            if not swapping:
                self._unheld_frames -= len(volts_out)

    def begin_output_hold(self, latency_frames: int, *, other_opamps: bool = False) -> None:
        """The output is another signal from now on: its peaks from before are no longer held."""
        if other_opamps:
            self._earlier = ()
        self.output_meter.clear_hold()
        self._unheld_frames = self._handover_frames + latency_frames

    def keep(self, circuit: LiveCircuit) -> None:
        """Keep what the op-amps did so far: the circuit is about to begin anew."""
        self._earlier = self.opamps(circuit)

    def clear(self) -> None:
        """Forget every hold, and what the op-amps did before they began anew."""
        self._earlier = ()
        self.clear_levels()

    def clear_levels(self) -> None:
        """Forget the peaks held."""
        self.input_meter.clear_hold()
        self.output_meter.clear_hold()

    def levels(self) -> tuple[LevelReading, LevelReading]:
        """Levels at the input and at the output."""
        return self.input_meter.read(), self.output_meter.read()

    def opamps(self, circuit: LiveCircuit) -> tuple[OpAmpReading, ...]:
        """One reading an op-amp since the holds were cleared; the circuit's own readings begin anew."""
        fresh = circuit.readings()
        self._earlier = joined_readings(self._earlier, fresh)
        self.opamp_peaks_v = tuple(reading.peak_v for reading in fresh)
        circuit.clear_readings()
        return self._earlier
