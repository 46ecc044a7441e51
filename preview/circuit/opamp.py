"""Op-amps: what a type's limits are, the built-in types, and what is read off one while the circuit runs."""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["BUILT_IN_TYPES", "IDEAL", "PERFECT", "OpAmpModel", "OpAmpReading"]

BUILT_IN_TYPES = ("perfect", "ideal")
"""``perfect`` has no limit at all; ``ideal`` has no limit but the rails."""


@dataclass(frozen=True, slots=True)
class OpAmpModel:
    """The typical figures of one op-amp type; a figure that is not given is without limit or fault."""

    type: str
    """Name of the type, such as TL072."""
    title: str = ""
    """What it is, in a few words."""
    gain_bandwidth_hz: float = math.inf
    """Open-loop gain times frequency on its falling slope [Hz]."""
    open_loop_gain: float = math.inf
    """Voltage gain at 0 Hz [V/V]."""
    slew_up_v_per_s: float = math.inf
    """Fastest rise of the output [V/s]."""
    slew_down_v_per_s: float = math.inf
    """Fastest fall of the output, as a magnitude [V/s]."""
    output_resistance_ohm: float = 0.0
    """Open-loop output resistance [ohm]."""
    swing_high_v: float = 0.0
    """From the highest output up to the positive rail at the lightest load that is stated [V]."""
    swing_low_v: float = 0.0
    """From the negative rail up to the lowest output at the lightest load that is stated [V]."""
    current_limit_a: float = math.inf
    """Largest output current, the smaller of source and sink where they differ [A]."""
    offset_v: float = 0.0
    """Input offset voltage [V]."""
    bias_a: float = 0.0
    """Current into each input, mean of the two; negative where it flows out [A]."""
    offset_current_a: float = 0.0
    """Difference of the two input currents [A]."""
    noise_v_rthz: float = 0.0
    """Input voltage noise density well above its corner [V/sqrt(Hz)]."""
    noise_corner_hz: float = 0.0
    """Where the 1/f part of the voltage noise power equals the white part [Hz]."""
    noise_a_rthz: float = 0.0
    """Input current noise density well above its corner [A/sqrt(Hz)]."""
    noise_current_corner_hz: float = 0.0
    """Where the 1/f part of the current noise power equals the white part [Hz]."""
    input_low_v: float = 0.0
    """From the negative rail up to the lower limit of the common-mode range [V]; negative below the rail."""
    input_high_v: float = 0.0
    """From the upper limit of the common-mode range up to the positive rail [V]; negative above the rail."""
    supply_min_v: float = 0.0
    """Smallest supply, positive less negative rail [V]."""
    supply_max_v: float = math.inf
    """Largest supply, positive less negative rail [V]."""
    supply_current_a: float = 0.0
    """Supply current of one amplifier without load [A]."""
    assumed: tuple[str, ...] = ()
    """Names of the fields that its file does not give, filled from the class of the type."""
    sources: tuple[tuple[str, str], ...] = ()
    """Field and where its figure comes from."""

    @property
    def real(self) -> bool:
        """Whether it is a type with a speed of its own, and not ``perfect`` or ``ideal``."""
        return math.isfinite(self.gain_bandwidth_hz)


PERFECT = OpAmpModel("perfect", "no limit at all", input_low_v=-math.inf, input_high_v=-math.inf)
"""No limit at all, not even the rails."""
IDEAL = OpAmpModel("ideal", "no limit but the rails", input_low_v=-math.inf, input_high_v=-math.inf)
"""The rails limit its output; nothing else does."""


@dataclass(frozen=True, slots=True)
class OpAmpReading:
    """What one op-amp did since its reading was last cleared, worst channel where there are several."""

    designator: str
    """U1, U2 ..."""
    peak_v: float
    """Largest magnitude of the output voltage [V]."""
    high_v: float
    """Largest output voltage [V]."""
    low_v: float
    """Smallest output voltage [V]."""
    headroom_db: float
    """Distance of the peak to the nearer rail [dB]; inf without a rail or a signal; 0 at the rail."""
    clip_events: int
    """Visits to a rail, all channels together."""
    clipped_s: float
    """Time spent at a rail, all channels together [s]."""
    slew_peak_v_per_s: float
    """Fastest output change [V/s]."""
    slew_limit_v_per_s: float = math.inf
    """Limit of its type [V/s]; inf where it has none."""
    current_peak_a: float = 0.0
    """Largest magnitude of the output current [A]."""
    unsolved_steps: int = 0
    """Steps in which the limits could not be solved to tolerance; 0 in a healthy run."""
