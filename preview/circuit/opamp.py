"""Op-amps: what a type's limits are, the built-in types, and what is read off one while the circuit runs."""

from __future__ import annotations

import math
from collections.abc import Collection
from dataclasses import dataclass, replace
from typing import Any, Literal, get_args

__all__ = [
    "BUILT_IN_TYPES",
    "IDEAL",
    "LIMITS",
    "OVERDRIVES",
    "PERFECT",
    "Limit",
    "OpAmpModel",
    "OpAmpReading",
    "Overdrive",
]

Overdrive = Literal["clips", "reverses"]
"""``clips``: the input stage follows no further; ``reverses``: the output runs to the opposite rail."""
OVERDRIVES: tuple[Overdrive, ...] = get_args(Overdrive)
Limit = Literal["speed", "slew", "swing", "current", "input range", "offset", "noise"]
"""What can be taken away from an op-amp, to hear what it does."""
LIMITS: tuple[Limit, ...] = ("speed", "slew", "swing", "current", "input range", "offset", "noise")

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
    swing_high_points: tuple[tuple[float, float], ...] = ()
    """Output current out of the pin [A] and distance from the highest output up to the positive rail there [V].

    By rising current from 0 A on, the slope never falling; beyond the last point the last slope goes on. Empty
    where the swing does not depend on the load."""
    swing_low_points: tuple[tuple[float, float], ...] = ()
    """Output current into the pin [A] and distance from the negative rail up to the lowest output there [V]."""
    current_source_a: float = math.inf
    """Largest current out of the output [A]."""
    current_sink_a: float = math.inf
    """Largest current into the output, as a magnitude [A]."""
    phase_margin_deg: float = 90.0
    """Phase margin at unity gain, by a second pole; 90 for none [deg]."""
    input_farad: float = 0.0
    """Capacitance of each input to gnd [F]."""
    input_differential_farad: float = 0.0
    """Capacitance between the inputs [F]."""
    input_overdrive: Overdrive = "clips"
    """What happens when the + input leaves the common-mode range."""
    crossover_v: float = 0.0
    """Dead zone that the output stage crosses between sourcing and sinking [V]; 0 for none."""
    crossover_a: float = 0.0
    """Current that the output sinks on the near side of the dead zone [A]."""
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
        """Whether it is a type with figures of its own, and not ``perfect`` or ``ideal``."""
        return self.type not in BUILT_IN_TYPES

    @property
    def current_limit_a(self) -> float:
        """Largest output current, the smaller of source and sink [A]."""
        return min(self.current_source_a, self.current_sink_a)

    def without(self, limits: Collection[Limit]) -> OpAmpModel:
        """The same op-amp with some of its limits and faults taken away.

        ``speed`` is gain-bandwidth, phase margin and input capacitance, ``swing`` what the output stays from the
        rails (and crossover), ``offset`` the offset voltage and input currents.
        """
        model = self
        for limit in limits:
            model = replace(model, **_WITHOUT[limit])
        return model


_WITHOUT: dict[Limit, dict[str, Any]] = {
    "speed": {
        "gain_bandwidth_hz": math.inf,
        "open_loop_gain": math.inf,
        "phase_margin_deg": 90.0,
        "input_farad": 0.0,
        "input_differential_farad": 0.0,
    },
    "slew": {"slew_up_v_per_s": math.inf, "slew_down_v_per_s": math.inf},
    "swing": {
        "swing_high_v": 0.0,
        "swing_low_v": 0.0,
        "swing_high_points": (),
        "swing_low_points": (),
        "crossover_v": 0.0,
        "crossover_a": 0.0,
    },
    "current": {"current_source_a": math.inf, "current_sink_a": math.inf},
    "input range": {"input_low_v": -math.inf, "input_high_v": -math.inf},
    "offset": {"offset_v": 0.0, "bias_a": 0.0, "offset_current_a": 0.0},
    "noise": {
        "noise_v_rthz": 0.0,
        "noise_corner_hz": 0.0,
        "noise_a_rthz": 0.0,
        "noise_current_corner_hz": 0.0,
    },
}


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
    current_limit_a: float = math.inf
    """Largest output current of its type, the smaller of source and sink [A]; inf where it has none."""
    current_limited_s: float = 0.0
    """Time spent at its largest output current, all channels together [s]."""
    input_range_events: int = 0
    """Visits of its + input outside the common-mode range, all channels together."""
    input_range_s: float = 0.0
    """Time that its + input spent there, all channels together [s]."""
    rest_v: float = 0.0
    """Output voltage at rest, without a signal [V]."""
    unsolved_steps: int = 0
    """Steps in which the limits could not be solved to tolerance; 0 in a healthy run."""
